"""p-values that allow for how many questions were asked: bounds, order, known values."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from statsmodels.stats.multitest import multipletests

from pipeline.core.multiplicity import benjamini_hochberg, holm, resampled_p, romano_wolf


@pytest.mark.parametrize("m", [1, 2, 7, 40])
@pytest.mark.parametrize("seed", [0, 1])
def test_holm_and_false_discovery(m: int, seed: int) -> None:
    """statsmodels multipletests; ties and ones included."""
    p = np.random.default_rng(seed).beta(0.4, 2, m).round(2)
    np.testing.assert_allclose(holm(p), multipletests(p, method="holm")[1], rtol=1e-12)
    known = multipletests(p, method="fdr_bh")[1]
    np.testing.assert_allclose(benjamini_hochberg(p), known, rtol=1e-12)


@given(p=st.lists(st.floats(0, 1), min_size=1, max_size=30))
@settings(max_examples=60, deadline=None)
def test_step_down_p_values_keep_order_and_bounds(p: list[float]) -> None:
    raw = np.array(p)
    for made in (holm(raw), benjamini_hochberg(raw)):
        assert (made >= raw - 1e-15).all()
        assert (made <= 1).all()
        order = np.argsort(raw, kind="stable")
        assert (np.diff(made[order]) >= -1e-15).all()


def test_romano_wolf_by_hand() -> None:
    """Three statistics, four draws: counts by the definition, step by step."""
    t = np.array([1.0, -3.0, 2.0])
    draws = np.array([[0.5, 2.5, 1.0], [3.5, 0.1, 0.2], [0.2, 0.3, 2.2], [1.5, 1.0, 0.4]])
    by_hand = np.empty(3)
    order, last = [1, 2, 0], 0.0
    for step, at in enumerate(order):
        left = order[step:]
        beyond = sum(max(abs(row[left])) >= abs(t[at]) for row in draws)
        last = max(last, (1 + beyond) / 5)
        by_hand[at] = last
    assert romano_wolf(t, draws) == pytest.approx(by_hand)
    assert by_hand.tolist() == [0.6, 0.4, 0.6]


def test_romano_wolf_uses_that_tests_move_together() -> None:
    """Ten copies of one statistic cost nothing; ten independent ones cost as much as Holm."""
    rng = np.random.default_rng(1)
    one = rng.normal(size=(4999, 1))
    t = np.full(10, 2.0)
    copies = romano_wolf(t, np.repeat(one, 10, axis=1))
    assert copies == pytest.approx(np.full(10, 0.0455), abs=0.012)
    apart = romano_wolf(t, rng.normal(size=(4999, 10)))
    assert apart[0] == pytest.approx(1 - (1 - 0.0455) ** 10, abs=0.03)


@given(seed=st.integers(0, 10_000), S=st.integers(1, 8), correlation=st.floats(0, 0.99))
@settings(max_examples=40, deadline=None)
def test_the_step_down_p_is_never_below_that_of_the_same_draws(
    seed: int, S: int, correlation: float
) -> None:
    """At least the statistic's own p, at most Bonferroni's, larger for smaller statistics."""
    stream = np.random.default_rng(seed)
    common = stream.normal(size=(200, 1))
    draws = np.sqrt(correlation) * common
    draws = draws + np.sqrt(1 - correlation) * stream.normal(size=(200, S))
    t = stream.normal(0, 2, S)
    raw, stepped = resampled_p(t, draws), romano_wolf(t, draws)
    assert (stepped >= raw).all()
    exceeded = raw * 201 - 1
    assert (stepped <= (1 + S * exceeded.max()) / 201 + 1e-12).all()
    assert (np.diff(stepped[np.argsort(-np.abs(t), kind="stable")]) >= 0).all()
    if S == 1:
        assert stepped == pytest.approx(raw)
