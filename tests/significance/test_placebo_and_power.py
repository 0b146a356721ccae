"""Sizes on dates without an announcement, and power."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from statsmodels.stats.power import NormalIndPower

from pipeline.core.window import Window
from pipeline.registry import TABLE, TESTS
from pipeline.significance.dependence import links
from pipeline.significance.placebo import farther, placebo_sizes
from pipeline.significance.power import POWER, detectable, detectable_of, power_frame, power_of
from pipeline.significance.sample import car_sample
from tests.significance.samples import WINDOW, clustered, linked

TEST_FUNCTIONS = {entry.key: entry.load() for entry in TABLE[TESTS] if not entry.resamples}


def test_rates_are_counted_over_the_samples() -> None:
    """Twenty samples of the same deals in other order: every test rejects in all or in none."""
    abnormal = clustered(deals=20, gaps=0)
    known = links(abnormal)
    stream = np.random.default_rng(1)
    orders = [stream.permutation(20) for _ in range(20)]
    samples = [(rows, abnormal.take(rows)) for rows in orders]
    own = car_sample(abnormal, WINDOW, 1.0)
    sizes, draws = placebo_sizes(
        samples, WINDOW, TEST_FUNCTIONS, known, float(own.car.mean()), 0.05
    )
    frame = sizes.set_index("test")
    lead = next(iter(TEST_FUNCTIONS))
    statistic = TEST_FUNCTIONS[lead](own).statistic
    assert set(draws["test"]) == {lead}
    np.testing.assert_allclose(draws["statistic"], statistic)
    np.testing.assert_allclose(draws["mean"], own.car.mean())
    told = {row["name"]: row["value"] for row in farther(draws, TEST_FUNCTIONS[lead](own))}
    assert told == {"draws": 20.0, "farther": 20.0}
    assert (frame.loc[frame.index != "mean", "rejected"].isin([0, 20])).all()
    for key in ("cross_sectional", "patell", "dependence_adjusted"):
        expected = TEST_FUNCTIONS[key](own).p_value < 0.05
        assert frame.loc[key, "rate"] == float(expected)
    assert frame.loc["mean", "rejected"] in (0, 20)
    assert frame.loc["mean", "rate"] == pytest.approx((1 + frame.loc["mean", "rejected"]) / 21)


def test_no_sample_gives_an_empty_frame() -> None:
    abnormal = clustered(deals=5, gaps=0)
    frame, _ = placebo_sizes([], WINDOW, TEST_FUNCTIONS, links(abnormal), 0.0, 0.05)
    assert frame.empty
    assert "rate" in frame


def test_power_and_deals_needed_against_statsmodels() -> None:
    """statsmodels' normal power of a two-sided test of one mean (ratio 0), at 5%."""
    alone = car_sample(clustered(deals=2, gaps=0), Window(0, 0), 1.0).dependence
    frame = power_frame(0.03, 100, type(alone)(np.nan, 0.0, 0, 0.0, np.nan, 100, 1))
    known = NormalIndPower(ddof=0)
    for _, row in frame.iterrows():
        size = row["effect"] / 0.03
        power = known.power(size, 100, 0.05, ratio=0)
        assert row["power"] == pytest.approx(power, abs=1e-8)
        if row["deals_needed"] > 20:
            needed = known.solve_power(size, None, 0.05, 0.8, ratio=0)
            assert abs(row["deals_needed"] - needed) <= 1.0


def test_the_smallest_effect_found_lies_where_power_is_four_fifths() -> None:
    abnormal = clustered(deals=20, gaps=0)
    sample = car_sample(abnormal, WINDOW, 1.0)
    frame = power_of(abnormal, WINDOW)
    smallest = detectable(float(sample.car.std(ddof=1)), sample.n, sample.dependence)
    assert (frame.loc[frame["effect"] >= smallest, "power"] >= 0.8 - 1e-6).all()
    assert (frame.loc[frame["effect"] < smallest, "power"] < 0.8).all()
    assert detectable_of(abnormal, WINDOW) == smallest
    one = abnormal.take(np.array([0]))
    assert power_of(one, WINDOW).empty
    assert np.isnan(detectable_of(one, WINDOW))


@pytest.mark.parametrize("r", [0.0, 0.002, 0.05])
def test_deals_needed_are_the_fewest_with_power_of_four_fifths(r: float) -> None:
    """The smallest mean that so many deals find is the effect; one deal fewer does not find it."""
    link, found = linked(r), 0
    for _, row in power_frame(0.03, 40, link).iterrows():
        effect, needed = row["effect"], row["deals_needed"]
        if np.isinf(needed):
            assert detectable(0.03, 10**9, link, power=POWER) >= effect
        elif needed > 2:
            found += 1
            assert detectable(0.03, int(needed), link, power=POWER) <= effect
            assert detectable(0.03, int(needed) - 1, link, power=POWER) > effect
    assert found >= 3


def test_deals_that_move_together_may_never_be_enough() -> None:
    """Deals whose correlation is .05 are worth fewer than twenty, however many are added."""
    together = power_frame(0.03, 40, linked(0.05)).set_index("effect")["deals_needed"]
    apart = power_frame(0.03, 40, replace(linked(0.05), weighted=-0.01))
    assert np.isinf(together.loc[:0.015]).all()
    assert np.isfinite(together.loc[0.02:]).all()
    assert (together.to_numpy() >= apart["deals_needed"].to_numpy()).all()
    assert np.isfinite(apart["deals_needed"]).all()
