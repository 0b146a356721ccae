"""Which tests are marked as holding in a sample, against what simulation says of them there."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.prices import Floats
from pipeline.core.window import Window
from pipeline.registry import TESTS, entry
from pipeline.significance.dependence import dependence
from pipeline.significance.sample import CarSample, car_sample
from pipeline.significance.validity import Reasons, independent
from tests.returns.panels import fitted, panel_of_returns, weekdays
from tests.significance.samples import ESTIMATION, SPAN, WINDOW, clustered

TOGETHER = np.r_[np.full(20, 170), np.arange(150, 190, 2)]
INDEPENDENT = ("standardised", "cross_sectional", "generalised_sign", "signed_rank", "patell")


def two_industries(seed: int, share: float = 0.4) -> AbnormalReturns:
    """Twenty deals of one industry on one date; twenty of another, which moves against it,
    spread over forty sessions. ``share`` is the correlation within an industry."""
    stream = np.random.default_rng(seed)
    shape = (200, 40)
    side = np.repeat([1.0, -1.0], 20)
    industry = np.sqrt(share) * stream.normal(size=(200, 1)) * side
    market = stream.normal(0, 0.008, 200)
    noise = 0.01 * (industry + np.sqrt(1 - share) * stream.normal(size=shape))
    panel = panel_of_returns(weekdays(200), market[:, None] + noise, market)
    return fitted("market_model", panel, np.arange(40), TOGETHER, ESTIMATION, SPAN)


def doubts(sample: CarSample) -> dict[str, str]:
    keys = (*INDEPENDENT, "dependence_adjusted", "date_bootstrap", "rank")
    reasons = Reasons(sample)
    return {key: reasons.against(entry(TESTS, key).assumes) for key in keys}


def test_industries_that_move_against_one_another_hide_nothing() -> None:
    """The plain mean correlation is below zero, that of deals whose windows meet is not."""
    sample = car_sample(two_industries(5), WINDOW, 1.0)
    link = sample.dependence
    assert link.mean < 0
    assert link.weighted > 10 * link.weighted_noise
    assert sample.n / link.effective_n(sample.n) > 3
    found = doubts(sample)
    for key in (*INDEPENDENT, "date_bootstrap", "rank"):
        assert "move together" in found[key], key
    assert found["dependence_adjusted"] == ""


def test_the_doubted_test_rejects_too_often_there() -> None:
    """scipy's t test of the same CARs over 200 samples without an effect."""
    cars = [two_industries(seed).car(WINDOW) for seed in range(200)]
    rejected = stats.ttest_1samp(np.array(cars), 0.0, axis=1).pvalue < 0.05
    assert rejected.mean() > 0.2


def test_independent_deals_are_not_doubted() -> None:
    """Of 100 samples of independent deals on one date, few are called dependent."""
    found = [
        independent(car_sample(clustered(20, 1, 0.0, seed, 0), WINDOW, 1.0)) for seed in range(100)
    ]
    assert sum(bool(reason) for reason in found) <= 8


def test_deals_that_never_meet_are_not_doubted() -> None:
    """However alike their days are: an industry whose deals lie far apart."""
    stream = np.random.default_rng(2)
    noise = 0.8 * stream.normal(size=(400, 1)) + 0.6 * stream.normal(size=(400, 20))
    market = stream.normal(0, 0.01, 400)
    panel = panel_of_returns(weekdays(400), market[:, None] + 0.01 * noise, market)
    position = 150 + 12 * np.arange(20)
    apart = fitted("market_model", panel, np.arange(20), position, ESTIMATION, SPAN)
    sample = car_sample(apart, WINDOW, 1.0)
    assert sample.dependence.mean > 10 * sample.dependence.noise
    assert sample.dependence.weighted == 0.0
    assert independent(sample) == ""


@pytest.mark.parametrize("window", [Window(0, 0), WINDOW])
def test_skewed_days_are_doubted_by_tests_that_scale_or_cumulate_before_they_rank(
    window: Window,
) -> None:
    """The plain rank test takes days as they are; a day's rank alone is not cumulated."""
    stream = np.random.default_rng(3)
    noise = 0.01 * (stream.exponential(size=(400, 20)) - 1)
    market = stream.normal(0, 0.01, 400)
    panel = panel_of_returns(weekdays(400), market[:, None] + noise, market)
    position = 150 + 12 * np.arange(20)
    skewed = fitted("market_model", panel, np.arange(20), position, ESTIMATION, SPAN)
    sample = car_sample(skewed, window, 1.0)
    found = {
        key: "daily returns are skewed" in Reasons(sample).against(entry(TESTS, key).assumes)
        for key in ("rank", "rank_event_variance", "generalised_rank")
    }
    several = len(window) > 1
    assert found == {"rank": False, "rank_event_variance": True, "generalised_rank": several}


def weighted_means(days: int, draws: int) -> Floats:
    """(draws, 2) weighted mean correlation of independent deals, and its stated noise."""
    found = [dependence(clustered(12, days, 0.0, seed, 0), WINDOW) for seed in range(draws)]
    return np.array([(link.weighted, link.weighted_noise) for link in found])


@pytest.mark.parametrize("days", [1, 6])
def test_noise_of_the_weighted_mean_is_its_scatter_under_independence(days: int) -> None:
    """Deals of one date, and deals whose windows meet in part."""
    found = weighted_means(days, 200)
    # Four Monte-Carlo standard errors of a standard deviation from 200 draws are 20%.
    assert (found[:, 0] / found[:, 1]).std() == pytest.approx(1.0, rel=0.22)
    assert (found[:, 1] > 0).all()


def test_noise_of_the_weighted_mean_on_one_date_is_that_of_the_mean() -> None:
    link = dependence(clustered(10, 1, 0.0, 3, 0), WINDOW)
    assert link.weighted_noise == pytest.approx(link.noise, rel=1e-12)
