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
        ({"suspects": (Suspect("x", "*", "+"),)}, "suspect_sign"),
    ],
)
def test_options_without_an_answer(
    design: Design, columns: Sequence[Column], more: dict[str, Any], rule: str
) -> None:
    with pytest.raises(InputProblem) as caught:
        scrutinise(design, columns, 0, replace(ScrutinyOptions(resamples=10), **more))
    assert caught.value.findings[0].rule == rule
