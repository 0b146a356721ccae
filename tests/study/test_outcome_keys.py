"""A study whose deal list holds the outcome: which keys it may and may not have."""

from __future__ import annotations

from pathlib import Path

import pytest

from pipeline.core.findings import Finding
from pipeline.study import plan
from pipeline.study.load import load_study
from tests.study.studies import refused, write

READY = """
title = "Premiums"
question = "Does agreeing first lower the premium?"

[inputs]
deals = "bids.csv"

[outcome]
column = "premium"
unit = "percent"
date = "announced_at"

[regression]
treatment = "agreed"
controls = ["rival"]
clusters = ["sector"]
columns = ["ols"]
"""


def ready(folder: Path, *pairs: tuple[str, str], more: str = "") -> Path:
    """The study file, each old text replaced by a new one, with ``more`` at its end."""
    text = READY
    for old, new in pairs:
        assert old in text
        text = text.replace(old, new)
    return write(folder / "study.toml", text + more)


def test_a_deal_list_is_enough(tmp_path: Path) -> None:
    study = load_study(ready(tmp_path))
    assert list(plan.sources(study)) == ["deals"]
    roles = plan.roles(study)
    assert roles is not None
    assert (roles.outcome, roles.outcome_label) == ("premium", "premium")
    assert roles.clusters == ("sector", "announced_at")


def test_words_of_the_outcome_come_from_its_label(tmp_path: Path) -> None:
    study = load_study(ready(tmp_path, ("unit =", 'label = "bid premium"\nunit =')))
    facts = plan.facts(study, "", ())
    assert facts.outcome.words == facts.words("premium") == "bid premium"
    assert facts.explained == {"outcome": "premium"}
    assert not any("session" in note.lower() for note in facts.notes)


SPOILED: dict[str, tuple[tuple[tuple[str, str], ...], str, str, str]] = {
    "prices": ((("[outcome]", 'prices = "p.csv"\n[outcome]'),), "", "outcome_and_returns",
               "inputs.prices"),
    "windows": ((), "[event_time]\nheadline = [-3, 3]\n", "outcome_and_returns", "event_time"),
    "models": ((), '[expected_returns]\nheadline = "constant_mean"\n', "outcome_and_returns",
               "expected_returns"),
    "tests": ((), '[tests]\nheadline = "rank"\n', "outcome_and_returns", "tests"),
    "placebo": ((), "[placebo]\ndraws = 10\n", "outcome_and_returns", "placebo"),
    "measure": ((), '[characteristics.run_up]\nprice = "run_up"\n', "outcome_and_returns",
                "characteristics.run_up.price"),
    "outcome as control": ((('["rival"]', '["premium"]'),), "", "duplicate_variable", "regression"),
    "outcome twice": ((("unit =", 'share_of = "premium"\nunit ='),), "", "duplicate_variable",
                      "outcome"),
    "outcome remade": ((), '[characteristics.premium]\ncolumn = "agreed"\n', "bad_value",
                       "outcome.column"),
    "three clusters": ((('["sector"]', '["sector", "bidder"]'),), "", "cluster_dimensions",
                       "regression.clusters"),
    "weights": ((('["ols"]', '["variance_weighted"]'),), "", "no_outcome_variance",
                "outcome.standard_error"),
    "money without currency": ((("percent", "money"),), "", "bad_value", "report.currency"),
    "money as a share": ((('"percent"', '"number"\nshare_of = "value"'),), "", "bad_value",
                         "outcome.share_of"),
    "foreseen gain": (
        (('["ols"]', '["ols"]\nexpected_gain = true'),),
        "",
        "outcome_and_returns",
        "regression.expected_gain",
    ),
    "unknown unit": ((("percent", "per cent"),), "", "bad_value", "outcome.unit"),
    "no unit": ((('unit = "percent"\n', ""),), "", "bad_value", "outcome.unit"),
}  # fmt: skip


@pytest.mark.parametrize("what", SPOILED)
def test_what_does_not_fit_is_named(what: str, tmp_path: Path) -> None:
    pairs, more, rule, key = SPOILED[what]
    found: tuple[Finding, ...] = refused(ready(tmp_path, *pairs, more=more))
    assert [(finding.rule, finding.column) for finding in found] == [(rule, key)]
    assert found[0].remedy


def test_without_an_outcome_prices_must_be_named(tmp_path: Path) -> None:
    text = READY[: READY.index("[outcome]")]
    found = refused(write(tmp_path / "study.toml", text))
    assert [finding.column for finding in found] == ["inputs.prices", "inputs.benchmarks"]
    assert all("[outcome]" in finding.remedy for finding in found)


def test_values_equal_to_the_defaults_do_no_harm(tmp_path: Path) -> None:
    load_study(ready(tmp_path, more="[event_time]\nheadline = [-1, 1]\n"))


def test_the_side_of_the_deals_may_be_named(tmp_path: Path) -> None:
    load_study(ready(tmp_path, more='[event_time]\nside = "target"\n'))
