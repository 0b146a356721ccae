"""Violated exclusions and instruments made from unequal variances."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import Shape, TestResult
from pipeline.core.findings import InputProblem
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.stages import Parts, parts_of
from pipeline.scrutiny import breakdown, exclusion
from tests.estimators.designs import deals, one_cluster_dimension, with_instruments, without

PLAIN = FitOptions()


@pytest.fixture(scope="module")
def design() -> Design:
    return one_cluster_dimension(without(deals(), "selection"))


@pytest.fixture(scope="module")
def parts(design: Design) -> Parts:
    return parts_of(design, PLAIN)


@pytest.mark.parametrize("gamma", [(0.0, 0.0), (0.01, -0.02)])
def test_equals_a_fit_of_the_outcome_less_the_violation(
    design: Design, parts: Parts, gamma: tuple[float, float]
) -> None:
    """Fixed effects, clusters, two instruments and controls at once."""
    found = exclusion.at_violation(parts, np.array(gamma), 0.95)
    refit = two_stage_least_squares(replace(design, y=design.y - design.Z @ np.array(gamma)), PLAIN)
    term = refit.term(design.treatment)
    assert found.estimate == pytest.approx(term["coefficient"], rel=1e-9)
    assert found.std_error == pytest.approx(term["std_error"], rel=1e-9)
    assert found.low == pytest.approx(term["ci_low"], rel=1e-9)


@given(share=st.floats(-1, 2))
@settings(max_examples=20, deadline=None)
def test_a_share_of_the_reduced_form_takes_that_share(share: float) -> None:
    parts = parts_of(one_cluster_dimension(without(deals(), "selection")), PLAIN)
    pi = exclusion.reduced_form(parts)
    full = exclusion.at_violation(parts, 0 * pi, 0.95).estimate
    found = exclusion.at_violation(parts, share * pi, 0.95).estimate
    assert found == pytest.approx((1 - share) * full, abs=1e-10)


def test_corners_hold_every_interval_between(parts: Parts) -> None:
    low, high = np.array([-0.01, -0.004]), np.array([0.02, 0.03])
    union = exclusion.union_of_intervals(parts, low, high, 0.95)
    rng = np.random.default_rng(5)
    inner = [
        exclusion.at_violation(parts, low + rng.random(2) * (high - low), 0.95) for _ in range(60)
    ]
    assert union.low <= min(item.low for item in inner)
    assert union.high >= max(item.high for item in inner)


def test_no_violation_gives_the_sets_of_the_fit(design: Design, parts: Parts) -> None:
    column = two_stage_least_squares(design, PLAIN)
    none = np.zeros(2)
    union = exclusion.union_of_intervals(parts, none, none, 0.95)
    assert (union.low, union.high) == pytest.approx(
        (column.sets["wald"].low, column.sets["wald"].high), rel=1e-9
    )
    robust = exclusion.union_of_anderson_rubin(parts, none, none, 0.95)
    ours = column.sets["anderson_rubin"]
    assert (robust.low, robust.high) == pytest.approx((ours.low, ours.high), rel=1e-6)


def test_anderson_rubin_at_a_violation_is_that_of_the_outcome_less_it(design: Design) -> None:
    single = with_instruments(design, 0)
    parts = parts_of(single, PLAIN)
    gamma = np.array([0.01])
    found = exclusion.union_of_anderson_rubin(parts, gamma, gamma, 0.95)
    refit = two_stage_least_squares(replace(single, y=single.y - single.Z @ gamma), PLAIN)
    ours = refit.sets["anderson_rubin"]
    assert found.shape is ours.shape is Shape.INTERVAL
    assert (found.low, found.high) == pytest.approx((ours.low, ours.high), rel=1e-8)


def test_unbounded_sets_stay_unbounded(design: Design) -> None:
    noise = np.random.default_rng(9).normal(size=(design.n, 1))
    parts = parts_of(replace(design, Z=noise, instruments=("noise",)), PLAIN)
    found = exclusion.union_of_anderson_rubin(parts, np.array([-0.1]), np.array([0.1]), 0.95)
    assert found.shape is Shape.LINE


def strong(design: Design) -> Design:
    """The design with an outcome in which the effect is beyond doubt."""
    return replace(design, y=design.y - 0.2 * design.X[:, 1])


@pytest.mark.parametrize("value", [0.0, 0.05])
def test_breakdown_is_where_the_union_first_holds_the_value(design: Design, value: float) -> None:
    parts = parts_of(strong(design), PLAIN)
    pi = np.abs(exclusion.reduced_form(parts))
    for share, union in (
        (breakdown.breakdown_share(parts, 0.95, value), exclusion.union_of_intervals),
        (
            breakdown.breakdown_share_anderson_rubin(parts, 0.95, value),
            exclusion.union_of_anderson_rubin,
        ),
    ):
        assert 0 < share < 2
        inside = union(parts, -0.99 * share * pi, 0.99 * share * pi, 0.95)
        beyond = union(parts, -1.03 * share * pi, 1.03 * share * pi, 0.95)
        assert not inside.covers(value)
        assert beyond.covers(value)


def test_breakdown_against_least_squares_looks_to_its_side(design: Design) -> None:
    """A violation may push the effect away from zero: the least-squares value beyond it counts."""
    parts = parts_of(strong(design), PLAIN)
    own = exclusion.at_violation(parts, np.zeros(2), 0.95)
    beyond = own.estimate + 4 * (own.low - own.estimate)
    share = breakdown.breakdown_share(parts, 0.95, beyond)
    pi = exclusion.reduced_form(parts)
    worst = min(
        exclusion.at_violation(parts, share * np.array(s) * pi, 0.95).low
        for s in ((-1, -1), (-1, 1), (1, -1), (1, 1))
    )
    assert worst == pytest.approx(beyond, abs=1e-8)


def test_the_difference_from_least_squares_carries_the_error_of_both(design: Design) -> None:
    """Against a bootstrap of whole clusters, and zero where the two are the same fit."""
    parts = parts_of(strong(design), PLAIN)
    found = breakdown.difference_at(parts, np.zeros(2), 0.95)
    (codes,) = parts.sample.rule.clusters.values()
    rng = np.random.default_rng(11)
    groups = np.unique(codes)
    rows = [np.flatnonzero(codes == g) for g in groups]
    drawn = []
    for _ in range(400):
        at = np.concatenate([rows[i] for i in rng.integers(0, len(rows), len(rows))])
        y, D, Z = parts.y[at], parts.D[at], parts.Z[at]
        fitted = Z @ np.linalg.lstsq(Z, D)[0]
        drawn.append(float(fitted @ y / (fitted @ fitted)) - float(D @ y / (D @ D)))
    # 400 draws: the standard error of a spread is 3.5%; clusters are few, so another 15%.
    assert found.std_error == pytest.approx(np.std(drawn), rel=0.2)
    same = replace(parts, Z=parts.D[:, None], instruments=("itself",))
    assert breakdown.difference_at(same, np.zeros(1), 0.95).estimate == pytest.approx(0, abs=1e-12)


def test_two_stages_that_agree_need_no_violation(design: Design) -> None:
    parts = parts_of(strong(design), PLAIN)
    assert breakdown.share_that_reconciles(parts, 0.95) >= 0
    same = replace(parts, Z=parts.D[:, None] + 1e-9, instruments=("itself",))
    assert breakdown.share_that_reconciles(same, 0.95) == 0.0


def test_breakdown_is_zero_if_the_interval_holds_zero_already(design: Design) -> None:
    rng = np.random.default_rng(0)
    parts = parts_of(replace(design, y=rng.normal(size=design.n)), PLAIN)
    assert breakdown.breakdown_share(parts, 0.999) == 0.0
    assert breakdown.breakdown_share_anderson_rubin(parts, 0.999) == 0.0


def test_local_to_zero_adds_the_spread_of_the_violation(design: Design) -> None:
    """One instrument: A = 1/π, so a shift of μ moves the effect by μ/π and adds (σ/π)²."""
    parts = parts_of(with_instruments(design, 0), PLAIN)
    pi = float(parts.Z[:, 0] @ parts.D) / float(parts.Z[:, 0] @ parts.Z[:, 0])
    base = exclusion.at_violation(parts, np.zeros(1), 0.95)
    found = exclusion.local_to_zero(parts, np.array([0.002]), np.array([[0.01**2]]), 0.95)
    assert found.estimate == pytest.approx(base.estimate - 0.002 / pi, rel=1e-9)
    assert found.std_error == pytest.approx(np.hypot(base.std_error, 0.01 / pi), rel=1e-9)


@pytest.mark.parametrize(("low", "high"), [((0.1, 0.0), (0.0, 0.1)), ((0.0,), (0.1,))])
def test_a_range_out_of_order_is_refused(
    parts: Parts, low: tuple[float, ...], high: tuple[float, ...]
) -> None:
    with pytest.raises(InputProblem) as caught:
        exclusion.union_of_intervals(parts, np.array(low), np.array(high), 0.95)
    assert caught.value.findings[0].rule == "violation_range"


def lewbel_world(seed: int, n: int = 4000) -> Design:
    """A common confounder with constant spread, and a choice whose own noise moves with x."""
    rng = np.random.default_rng(seed)
    x, u = rng.normal(size=(2, n))
    D = 0.5 * x + u + rng.normal(size=n) * np.exp(0.4 * x)
    y = 0.5 * D + 0.3 * x + u + rng.normal(size=n)
    return Design(
        y=y,
        X=np.column_stack([np.ones(n), D, x]),
        names=("constant", "D", "x"),
        treatment="D",
        rows=tuple(map(str, range(n))),
        outcome="y",
    )


def test_unequal_variances_recover_the_effect_least_squares_misses() -> None:
    design = lewbel_world(3)
    found = exclusion.heteroskedastic_instruments(design, PLAIN)
    term = found.term("D")
    assert abs(term["coefficient"] - 0.5) < 3.5 * term["std_error"]
    plain = np.linalg.lstsq(design.X, design.y)[0][1]
    assert plain > 0.5 + 5 * term["std_error"]
    test = found.tests["heteroskedasticity"]
    assert isinstance(test, TestResult)
    assert test.p_value < 1e-10


def test_made_instruments_are_products_of_controls_and_residuals() -> None:
    design = lewbel_world(4, 200)
    Z, names, _ = exclusion.generated_instruments(design)
    x = design.X[:, 2]
    left = (
        design.X[:, 1]
        - design.X[:, [0, 2]] @ np.linalg.lstsq(design.X[:, [0, 2]], design.X[:, 1])[0]
    )
    assert names == ("x × residual",)
    assert Z[:, 0] == pytest.approx((x - x.mean()) * left, abs=1e-10)
    with pytest.raises(InputProblem):
        exclusion.generated_instruments(design, ["constant"])


def test_external_instruments_may_stay_beside_the_made_ones(design: Design) -> None:
    found = exclusion.heteroskedastic_instruments(design, PLAIN, ["run_up"], external=True)
    assert found.stages[0].names[:3] == (*design.instruments, "run_up × residual")
