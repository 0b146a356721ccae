"""Robustness values, benchmarks and proportional selection: identities, limits, refusals."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pipeline.core.design import Design, FitOptions
from pipeline.core.findings import InputProblem
from pipeline.core.rules import RULES
from pipeline.scrutiny import confounder, omitted
from pipeline.scrutiny.ground import ground_of, partial_r_squared, varying
from tests.estimators.designs import deals, with_column, without

PLAIN = FitOptions()


@pytest.fixture(scope="module")
def design() -> Design:
    return without(deals(), "selection")


@given(t=st.floats(0.05, 60), df=st.integers(5, 5000), q=st.floats(0.1, 1.5))
@settings(max_examples=60, deadline=None)
def test_a_confounder_of_that_value_takes_just_that_share(t: float, df: int, q: float) -> None:
    value = confounder.robustness_value(t, df, q)
    size = confounder.bias(1.0, df, np.array([value]), np.array([value]))[0]
    assert size == pytest.approx(q * t, rel=1e-8)
    extreme = confounder.extreme_robustness_value(t, df, q)
    assert confounder.bias(1.0, df, np.array([extreme]), np.ones(1))[0] == pytest.approx(q * t)


@given(t=st.floats(0.2, 60), df=st.integers(5, 400), inflation=st.floats(0.5, 3))
@settings(max_examples=40, deadline=None)
def test_significance_ends_at_the_value(t: float, df: int, inflation: float) -> None:
    """No confounder weaker than the value makes the interval hold zero, one as strong does.

    The worst strength with the outcome is searched on a grid, not taken from the formula.
    """
    reach = confounder.critical_reach(df, 0.95, inflation, df - 1)
    value = confounder.robustness_value(t, df, reach=reach)
    if value == 0:
        assert t / np.sqrt(df) <= reach
        return
    for strength, holds in ((value * 0.999, False), (value * 1.001, True)):
        if strength >= 1:
            continue
        with_y = np.linspace(0, strength, 4001)
        with_d = np.full_like(with_y, strength)
        left = t - confounder.bias(1.0, df, with_d, with_y)
        error = confounder.adjusted_error(1.0, df, with_d, with_y)
        # reach = inflation·t*/√(df - 1), the adjusted error carries √(df/(df - 1)).
        zero = left - reach * np.sqrt(df - 1) * error <= 0
        assert bool(zero.any()) == holds


def test_clustered_t_is_not_put_into_the_bias(design: Design) -> None:
    """The identity: leaving a control out moves the effect by the classical formula alone."""
    ground = ground_of(design, PLAIN)
    slim = ground_of(
        replace(design, X=design.X[:, :-1], names=design.names[:-1]), FitOptions(cluster=True)
    )
    x = design.X[:, -1]
    others = slim.W
    with_d = partial_r_squared(slim.D, x, others)
    with_y = partial_r_squared(slim.y, x, np.column_stack([slim.D, others]))
    strength = np.array([with_d]), np.array([with_y])
    moved = abs(slim.estimate - ground.estimate)
    assert confounder.bias(slim.classical, slim.df, *strength)[0] == pytest.approx(moved, rel=1e-10)
    wrong = confounder.bias(slim.robust, slim.df, *strength)[0]
    assert abs(wrong - moved) > 0.01 * moved


def test_benchmarks_bound_a_confounder_as_strong_as_the_control() -> None:
    """D's strength is exact and Y's never too small for a confounder orthogonal to the control."""
    rng = np.random.default_rng(2)
    for _ in range(25):
        n = 300
        raw = rng.normal(size=(n, 4))
        basis = np.linalg.qr(np.column_stack([np.ones(n), raw]))[0][:, 1:] * np.sqrt(n)
        x, z, e, u = basis.T
        a, c = rng.uniform(0.1, 0.8), rng.uniform(-0.8, 0.8)
        D = a * x + a * z + e
        y = rng.normal() * D + c * x + c * z + u
        made = Design(
            y=y,
            X=np.column_stack([np.ones(n), D, x]),
            names=("constant", "D", "x"),
            treatment="D",
            rows=tuple(map(str, range(n))),
            outcome="y",
        )
        ground = ground_of(made, PLAIN)
        one = np.ones((n, 1))
        k_d = partial_r_squared(D, z, one) / partial_r_squared(D, x, one)
        assert k_d == pytest.approx(1, rel=1e-8)
        found = confounder.benchmark(ground, "x", 1.0, 0.95)
        actual_d = partial_r_squared(D, z, np.column_stack([one, x]))
        assert found.with_treatment == pytest.approx(actual_d, rel=1e-8)
        actual_y = partial_r_squared(y, z, np.column_stack([one, x, D]))
        assert found.with_outcome >= actual_y - 1e-9


def test_a_benchmark_no_confounder_can_match_says_so(design: Design) -> None:
    D = design.X[:, 1]
    near = with_column(design, "near", D + 0.1 * np.random.default_rng(1).normal(size=design.n))
    found = confounder.benchmark(ground_of(near, PLAIN), "near", 3.0, 0.95)
    assert not found.possible
    assert np.isnan(found.estimate)


def test_a_benchmark_must_be_a_control(design: Design) -> None:
    for name in ("constant", "paid_in_shares", "unheard_of"):
        with pytest.raises(InputProblem) as caught:
            confounder.benchmark(ground_of(design, PLAIN), name, 1.0, 0.95)
        (finding,) = caught.value.findings
        assert finding.rule == "benchmark_not_control"
        assert finding.rule in RULES


def test_contour_holds_estimate_and_benchmarks(design: Design) -> None:
    ground = ground_of(design, PLAIN)
    found = [confounder.benchmark(ground, name, 1.0, 0.95) for name in varying(ground)]
    picture = confounder.contour(ground, found)
    assert picture.estimates.shape == picture.statistics.shape == (41, 41)
    assert picture.estimates[0, 0] == ground.estimate
    assert len(picture.points) == len(found)
    top = picture.with_treatment[-1]
    assert all(max(d, y) <= top for d, y, _ in picture.points.values())


@pytest.mark.parametrize("effects", [False, True])
def test_short_is_long_plus_delta_gamma(design: Design, effects: bool) -> None:
    found = omitted.left_out(ground_of(design, PLAIN, effects=effects))
    assert [item.control for item in found] == ["relative_size", "run_up", "leverage"]
    for item in found:
        assert abs(item.gap) < 1e-10
        slim = replace(
            design,
            X=design.X[:, [name != item.control for name in design.names]],
            names=tuple(name for name in design.names if name != item.control),
        )
        assert ground_of(slim, PLAIN, effects=effects).estimate == pytest.approx(
            item.short, abs=1e-10
        )


@given(seed=st.integers(0, 10_000), strength=st.floats(0.1, 3), more=st.floats(0.01, 0.4))
@settings(max_examples=60, deadline=None)
def test_delta_undoes_the_adjusted_effect(seed: int, strength: float, more: float) -> None:
    """Every root of the cubic is an effect for which the strength is what was asked."""
    raw = np.random.default_rng(seed).normal(size=(60, 4)) @ np.diag([1, 1, 2, 0.5])
    raw[:, 1] += 0.5 * raw[:, 2]
    raw[:, 0] += raw[:, 1] + 0.7 * raw[:, 2] - 0.4 * raw[:, 3]
    centred = raw - raw.mean(axis=0)
    m = omitted.movement_from(centred.T @ centred / 60)
    r_max = m.long_r2 + more * (1 - m.long_r2)
    found = omitted.adjusted_effect(m, r_max, strength)
    assert found.roots
    for root in found.roots:
        assert omitted.delta(m, r_max, root) == pytest.approx(strength, rel=1e-4)
    assert found.effect in found.roots


def test_the_effect_is_the_controlled_one_when_nothing_is_missing(design: Design) -> None:
    m = omitted.movement_of(ground_of(design, PLAIN))
    assert omitted.adjusted_effect(m, m.long_r2).effect == pytest.approx(m.long, rel=1e-9)
    assert omitted.adjusted_effect(m, 0.9, 0.0).effect == pytest.approx(m.long, rel=1e-9)


def test_the_approximation_may_be_far_from_the_exact_effect() -> None:
    """Two unequal confounders: y = .5D + w1 + 3w2, D = w1 + .2w2 + e, w1 recorded."""
    V = np.diag([1.0, 1.0, 0.2, 0.0])
    load = np.array([[1.5, 3.1, 0.5], [1.0, 0.2, 1.0], [1.0, 0.0, 0.0]])
    m = omitted.movement_from(load @ V[:3, :3] @ load.T)
    strength = omitted.delta(m, 1.0, 0.5)
    exact = omitted.adjusted_effect(m, 1.0, strength)
    assert min(abs(root - 0.5) for root in exact.roots) < 1e-8
    assert abs(omitted.approximate_effect(m, 1.0, strength) - 0.5) > 0.05


def test_the_resampled_effects_gather_around_the_effect(design: Design) -> None:
    ground = ground_of(design, PLAIN)
    m = omitted.movement_of(ground)
    codes = next(iter(ground.sample.rule.clusters.values()))
    draws = omitted.resampled_effects(ground, codes, {"some": (1.0, 0.1)}, 300, 7)["some"]
    again = omitted.resampled_effects(ground, codes, {"some": (1.0, 0.1)}, 300, 7)["some"]
    assert np.array_equal(draws, again)
    centre = omitted.adjusted_effect(m, m.long_r2 + 0.1).effect
    assert abs(np.median(draws) - centre) < 4 * np.std(draws) / np.sqrt(300) + 0.002


def test_r_max_never_exceeds_one() -> None:
    m = omitted.Movement(0.3, 0.5, 0.2, 0.9, 1.0, 1.0, 0.8)
    assert set(omitted.r_max_grid(m).values()) == {1.0}


def test_the_figures_of_the_simulation_hold() -> None:
    """Committed coverage lies within three Monte-Carlo errors of what each row claims."""
    path = Path(__file__).parents[1] / "benchmarks" / "figures" / "scrutiny_coverage.json"
    rows = json.loads(path.read_text(encoding="utf-8"))["rows"]
    assert len(rows) >= 12
    for row in rows:
        gap = row["rate"] - row["claimed"]
        allowed = 3 * row["monte_carlo_se"]
        assert gap >= -allowed, row["what"]
        if row["exact"]:
            assert gap <= allowed, row["what"]
