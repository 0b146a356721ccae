"""The whole scrutiny on invented deals: what it holds, what it refuses, what it leaves out."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import Column, Estimate, Withheld
from pipeline.core.findings import InputProblem
from pipeline.core.scrutiny import (
    DIRECTION_COLUMNS,
    SENSITIVITY_COLUMNS,
    TABLES,
    Scrutiny,
    direction_frame,
    sensitivity_frame,
)
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.least_squares import fixed_effects, ols
from pipeline.estimators.selection import heckman_two_step
from pipeline.scrutiny.directions import Suspect
from pipeline.scrutiny.options import ScrutinyOptions
from pipeline.scrutiny.scrutinise import scrutinise
from tests.estimators.designs import arrays, deals
from tests.scrutiny import worlds

OPTIONS = ScrutinyOptions(
    suspects=(Suspect("Overvaluation", "-", "+", "argued"),),
    reliability={"run_up": 0.9, "relative_size": 0.85},
    resamples=60,
    simex=True,
    labels={"paid_in_shares": "paying in shares"},
)


@pytest.fixture(scope="module")
def design() -> Design:
    return deals(candidates=400)


@pytest.fixture(scope="module")
def columns(design: Design) -> tuple[Estimate, ...]:
    fits: tuple[Any, ...] = (ols, fixed_effects, heckman_two_step, two_stage_least_squares)
    return tuple(fit(design, FitOptions()) for fit in fits)


@pytest.fixture(scope="module")
def found(design: Design, columns: Sequence[Column]) -> Scrutiny:
    return scrutinise(design, columns, 3, OPTIONS)


def test_rows_make_the_agreed_frame(found: Scrutiny) -> None:
    frame = sensitivity_frame(found.variants)
    assert list(frame.columns) == list(SENSITIVITY_COLUMNS)
    assert {name: str(kind) for name, kind in frame.dtypes.items()} == SENSITIVITY_COLUMNS
    assert not frame.duplicated(["target", "dimension", "variant"]).any()
    assert np.isfinite(frame["estimate"]).all()
    held = frame.dropna()
    assert (held["ci_low"] <= held["ci_high"]).all()
    assert list(direction_frame(found.directions).columns) == list(DIRECTION_COLUMNS)


def test_both_numbers_are_put_to_their_doubts(found: Scrutiny) -> None:
    frame = sensitivity_frame(found.variants)
    assert set(frame["target"]) == {
        "effect of paying in shares",
        "least-squares effect of paying in shares",
    }
    by_target = frame.groupby("target")["dimension"].agg(set)
    assert by_target["least-squares effect of paying in shares"] >= {
        "controls",
        "hidden confounder",
        "proportional selection",
        "measurement error",
        "measurement error, bounds",
        "misclassified feature",
        "hidden choice",
        "one deal left out",
        "one acquirer left out",
        "one industry left out",
        "announcement day",
        "anticipation",
    }
    assert by_target["effect of paying in shares"] >= {
        "exclusion",
        "one deal left out",
        "anticipation",
    }


def test_facts_are_the_numbers_of_the_rows(
    found: Scrutiny, design: Design, columns: tuple[Estimate, ...]
) -> None:
    frame = sensitivity_frame(found.variants)
    lead = columns[3].term(design.treatment)["coefficient"]
    rows = frame[
        (frame["dimension"] == "one deal left out") & ~frame["target"].str.contains("least")
    ]
    assert found.facts["lead_without_one_deal"] in rows["estimate"].tolist()
    assert found.facts["lead_without_one_deal"] - lead == pytest.approx(
        found.facts["lead_without_one_deal_change"], abs=1e-9
    )
    assert found.facts["identity_gap"] < 1e-10
    assert 0 <= found.facts["robustness_value_significant"] <= found.facts["robustness_value"] < 1
    assert all(np.isfinite(value) for name, value in found.facts.items() if "rho" not in name)


def test_checks_state_threshold_and_source(found: Scrutiny) -> None:
    assert len(found.checks) > 8
    for check in found.checks:
        assert check.verdict in ("pass", "warn")
        assert check.threshold
        assert check.source
        assert check.meaning.endswith(".")


def test_the_suspected_factor_gets_its_direction(found: Scrutiny) -> None:
    (one,) = found.directions
    assert (one.bias, one.evidence) == ("-", "argued")


def test_nothing_is_changed_and_all_repeats(design: Design, columns: Sequence[Column]) -> None:
    before = [array.copy() for array in arrays(design)]
    first = scrutinise(design, columns, 3, OPTIONS)
    second = scrutinise(design, columns, 3, OPTIONS)
    assert repr(first.variants) == repr(second.variants)
    assert repr(first.facts) == repr(second.facts)
    assert all(np.array_equal(a, b) for a, b in zip(before, arrays(design), strict=True))


@pytest.mark.parametrize("lead", [0, 1, 2, -1])
def test_any_column_may_lead(design: Design, columns: Sequence[Column], lead: int) -> None:
    plain = ScrutinyOptions(resamples=30)
    made = scrutinise(design, columns, lead, plain)
    targets = {item.target for item in made.variants}
    assert "effect of paid in shares" in targets
    assert len(targets) == (2 if lead == 2 else 1)


def test_withheld_columns_are_passed_over(design: Design) -> None:
    made = scrutinise(
        design, (Withheld("ols", "Least squares", "no"),), -1, ScrutinyOptions(resamples=30)
    )
    assert made.variants


@pytest.mark.parametrize("asked", ["classical", "hc0", "hc3", "cr2", "cr3"])
def test_any_errors_may_be_asked_for(design: Design, asked: str) -> None:
    single = replace(design, clusters={"acquirer": design.clusters["acquirer"]}, selection=None)
    options = FitOptions(covariance=asked)
    column = ols(single, options)
    made = scrutinise(single, (column,), 0, ScrutinyOptions(fit=options, resamples=30))
    assert made.facts["robustness_value"] > 0


def test_a_measured_treatment_skips_what_needs_a_choice() -> None:
    measured = worlds.noisy_treatment(np.random.default_rng(1), 200)
    column = ols(measured, FitOptions())
    made = scrutinise(measured, (column,), 0, ScrutinyOptions(resamples=30))
    dimensions = {item.dimension for item in made.variants}
    assert "hidden choice" not in dimensions
    assert "misclassified feature" not in dimensions
    assert "gamma" not in made.facts


def test_no_controls_leave_their_doubts_out() -> None:
    measured = worlds.noisy_treatment(np.random.default_rng(1), 200)
    bare = replace(measured, X=measured.X[:, :2], names=measured.names[:2])
    made = scrutinise(bare, (ols(bare, FitOptions()),), 0, ScrutinyOptions(resamples=30))
    assert "oster_delta_1.3" not in made.facts
    assert made.facts["strongest_control"] == 0


@pytest.mark.parametrize(
    ("more", "rule"),
    [
        ({"benchmarks": ("unheard_of",)}, "benchmark_not_control"),
        ({"reliability": {"run_up": 1.2}}, "reliability_range"),
        ({"reliability": {"unheard_of": 0.9}}, "reliability_variable"),
        ({"reliability": {"paid_in_shares": 0.9}}, "reliability_of_choice"),
        ({"reliability": {"run_up": 1e-9}}, "reliability_too_low"),
        ({"suspects": (Suspect("x", "*", "+"),)}, "suspect_sign"),
        ({"reverse": ("unheard_of",)}, "reverse_instrument"),
    ],
)
def test_options_without_an_answer(
    design: Design, columns: Sequence[Column], more: dict[str, Any], rule: str
) -> None:
    with pytest.raises(InputProblem) as caught:
        scrutinise(design, columns, 3, replace(ScrutinyOptions(resamples=10), **more))
    (finding,) = caught.value.findings
    assert finding.rule == rule
    assert finding.remedy


def test_every_table_has_its_columns_and_agrees_with_the_rows(
    found: Scrutiny, design: Design, columns: tuple[Estimate, ...]
) -> None:
    assert set(found.tables) == set(TABLES) - {"both_ways"}
    for name, frame in found.tables.items():
        assert {column: str(kind) for column, kind in frame.dtypes.items()} == TABLES[name]
    falls = found.tables["breakdowns"]
    assert not falls.duplicated(["target", "key"]).any()
    assert (falls["needed"].str.count(r"\{\}") == 1).all()
    for _, row in falls.iterrows():
        assert (row["verdict"] == "holds") == (abs(row["value"]) > row["wanted"])
    values = falls.set_index(["target", "key"])["value"]
    base = "least-squares effect of paying in shares"
    assert values[base, "confounder_zero"] == found.facts["robustness_value"]
    assert values[base, "confounder_interval"] == found.facts["robustness_value_significant"]
    lead = "effect of paying in shares"
    assert values[lead, "exclusion_zero"] in (
        found.facts["lead_breakdown_share"],
        found.facts["lead_breakdown_share_anderson_rubin"],
    )


def test_the_identity_is_shown_for_each_control(found: Scrutiny) -> None:
    frame = found.tables["controls_left_out"]
    product = frame["gamma"] * frame["delta"]
    assert np.allclose(frame["short"], frame["long"] + product, rtol=0, atol=1e-12)
    assert frame["control"].is_unique


def test_the_largest_r2_goes_up_to_one(found: Scrutiny) -> None:
    frame = found.tables["largest_r2"]
    asked = frame[frame["rule"] == "as asked"]
    assert asked["largest_r2"].max() == 1.0
    assert (frame["largest_r2"] <= 1).all()
    roots = [float(root) for text in frame["roots"] for root in text.split(", ")]
    assert all(any(np.isclose(r, e) for r in roots) for e in frame["estimate"])


def test_expectations_are_every_pair(found: Scrutiny, columns: tuple[Estimate, ...]) -> None:
    frame = found.tables["expectations"]
    for _, part in frame.groupby("target"):
        assert len(part) == len(OPTIONS.known_before) * len(OPTIONS.completion)
        own = part[(part["known_before"] == 0) & (part["completion"] == 1)]["estimate"].iloc[0]
        kept = part["completion"] * (1 - part["known_before"])
        assert np.allclose(part["estimate"] * kept, own, rtol=1e-12)


def test_every_deal_and_group_is_left_out_once(design: Design, columns: Sequence[Column]) -> None:
    codes = np.arange(design.n) % 4
    options = replace(
        OPTIONS,
        simex=False,
        dimensions={"quarter": codes},
        groups={"quarter": ("first", "second", "third", "fourth")},
    )
    frame = scrutinise(design, columns, 0, options).tables["left_out"]
    by = frame.groupby("dimension")
    assert by["group"].nunique().equals(by.size())
    assert set(by.get_group("quarter")["group"]) == {"first", "second", "third", "fourth"}
    deals_out = by.get_group("deal")
    assert len(deals_out) == design.n
    sizes = deals_out["change"].abs().to_numpy()
    assert (np.diff(sizes) <= 1e-15).all()
    full = columns[0].term(design.treatment)["coefficient"]  # type: ignore[union-attr]
    assert np.allclose(deals_out["estimate"] - full, deals_out["change"], atol=1e-12)


def test_added_error_is_drawn_back_to_none(found: Scrutiny) -> None:
    frame = found.tables["extrapolation"]
    assert set(frame["curve"]) == {"simulated", "linear", "quadratic", "rational"}
    ends = frame[frame["zeta"] == -1].groupby("curve")["estimate"].agg(list)
    shown = {item.estimate for item in found.variants if "by simulation" in item.variant}
    for values in ends:
        assert all(np.isclose(list(shown), value, rtol=1e-9, atol=0).any() for value in values)


def test_two_equations_on_request(design: Design, columns: Sequence[Column]) -> None:
    options = replace(OPTIONS, simex=False, reliability={}, reverse=("run_up",))
    made = scrutinise(design, columns, 3, options)
    frame = made.tables["both_ways"]
    assert set(frame["equation"]) == {"outcome", "choice"}
    own = frame[
        (frame["equation"] == "outcome")
        & (frame["method"] == "two stages")
        & (frame["term"] == design.treatment)
    ]
    lead = columns[3].term(design.treatment)  # type: ignore[union-attr]
    assert own["coefficient"].iloc[0] == pytest.approx(lead["coefficient"], rel=1e-9)
    assert own["std_error"].iloc[0] == pytest.approx(lead["std_error"], rel=1e-9)


def test_words_follow_what_is_explained(design: Design, columns: Sequence[Column]) -> None:
    options = replace(
        OPTIONS, simex=False, outcome="bid premium", misplaced=(), expected=(), known_before=(),
        completion=(),
    )  # fmt: skip
    made = scrutinise(design, columns, 3, options)
    told = " ".join(made.tables["breakdowns"]["needed"])
    assert "bid premium" in told
    assert "return" not in told
    assert "expectations" not in made.tables
    dimensions = {item.dimension for item in made.variants}
    assert not dimensions & {"anticipation", "announcement day"}


def test_what_was_put_to_the_doubts_is_told_as_reported(
    found: Scrutiny, design: Design, columns: tuple[Estimate, ...]
) -> None:
    frame = found.tables["reported"].set_index("lead")
    assert frame["title"].to_dict() == {False: columns[0].title, True: columns[3].title}
    lead = columns[3].interval
    assert (frame.loc[True, "ci_low"], frame.loc[True, "ci_high"]) == (lead.low, lead.high)
    assert frame.loc[False, "estimate"] == columns[0].term(design.treatment)["coefficient"]


@pytest.mark.parametrize("spread", [0.0, 0.8])
def test_generated_instruments_are_tested_three_ways_where_they_say_something(
    spread: float,
) -> None:
    rng = np.random.default_rng(8)
    x, w, z, u = rng.normal(size=(4, 900))
    D = 0.5 * x + z + u + rng.normal(size=900) * np.exp(spread * x)
    y = 0.5 * D + 0.3 * x + u + rng.normal(size=900)
    design = worlds.made(y, D, np.column_stack([x, w]), Z=z[:, None], instruments=("z",))
    column = two_stage_least_squares(design, FitOptions())
    made = scrutinise(design, (column,), 0, ScrutinyOptions(resamples=30))
    told = [c for c in made.checks if c.subject == "Instruments from unequal variances"]
    assert "moves with the controls" in told[0].check
    if spread:
        assert [c.verdict for c in told] == ["pass", "pass", "pass"]
        assert {c.check.split(",")[0] for c in told[1:]} == {
            "Strength of instruments from unequal variances",
            "Instruments from unequal variances agree with one another",
        }
        assert [item for item in made.variants if item.dimension == "other instruments"]
    else:
        assert [c.verdict for c in told] == ["warn"]
