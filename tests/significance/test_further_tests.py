"""The tests a study may name beside the usual ones, each against an independent computation."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.estimate import NotApplicable, Tested, TestResult
from pipeline.core.prices import Floats
from pipeline.registry import TABLE, TESTS
from pipeline.significance.parametric import dependence_adjusted_patell, patell
from pipeline.significance.ranks import generalised_rank, generalised_rank_z, rank_event_variance
from pipeline.significance.resampled import (
    deal_bootstrap,
    hall,
    johnson,
    skewness_adjusted,
    skewness_transformed,
    student,
)
from pipeline.significance.sample import CarSample, car_sample
from pipeline.study import schema
from tests.significance.samples import WINDOW, clustered, linked, sample_of

FURTHER = (
    dependence_adjusted_patell,
    rank_event_variance,
    generalised_rank_z,
    skewness_transformed,
    deal_bootstrap,
)


def result(test: Tested) -> TestResult:
    assert isinstance(test, TestResult), test
    return test


@pytest.fixture(scope="module", params=[0, 60])
def abnormal(request: pytest.FixtureRequest) -> AbnormalReturns:
    return clustered(deals=24, gaps=request.param)


@pytest.fixture(scope="module")
def sample(abnormal: AbnormalReturns) -> CarSample:
    return car_sample(abnormal, WINDOW, 1.0)


def test_a_study_uses_them_when_it_names_them() -> None:
    named = {entry.key for entry in TABLE[TESTS] if not entry.default}
    assert {function.__name__ for function in FURTHER} == named
    assert not named & set(schema.Tests().use)


@pytest.mark.parametrize("weighted", [-0.1, 0.0, 0.02, 0.3])
def test_adjusted_patell_by_the_variance_of_a_sum(weighted: float) -> None:
    """The variance of a sum of n equally correlated variables is n v (1 + (n-1) r): numpy's sum
    over their covariance matrix. Kolari and Pynnönen 2010."""
    stream = np.random.default_rng(1)
    n, df = 30, 98
    made = sample_of(stream.normal(0.004, 0.02, n), np.full(n, 0.02), df, linked(weighted))
    r = max(weighted, 0.0)
    covariance = stats.t(df).var() * (np.full((n, n), r) + (1 - r) * np.eye(n))
    found = result(dependence_adjusted_patell(made))
    assert found.statistic == pytest.approx(made.scar.sum() / np.sqrt(covariance.sum()), rel=1e-12)
    assert found.p_value == pytest.approx(2 * stats.norm.sf(abs(found.statistic)), rel=1e-10)
    assert abs(found.statistic) <= abs(result(patell(made)).statistic) * (1 + 1e-12)


def ranked(parts: list[Floats]) -> Floats:
    """(T,) mean over deals of the centred rank, by scipy's ``rankdata``."""
    returns = np.hstack(parts)
    known = np.isfinite(returns).sum(axis=1, keepdims=True)
    return np.nanmean(stats.rankdata(returns, axis=1, nan_policy="omit") / (known + 1) - 0.5, 0)


def test_rank_with_event_variance_by_loops(abnormal: AbnormalReturns, sample: CarSample) -> None:
    """Corrado and Zivney 1992, day by day; the window's sum as in Cowan 1992."""
    sd = np.sqrt(abnormal.residual_variance)[:, None]
    event = abnormal.returns[:, abnormal.columns(WINDOW)] / sd
    scaled = np.column_stack([day / stats.tstd(day) for day in event.T])
    mean = ranked([abnormal.estimation_returns / sd, scaled])
    share = np.isfinite(abnormal.estimation_returns).mean(axis=0)
    weight = np.append(share, np.ones(3))
    known = mean[-3:].sum() / np.sqrt(3 * np.mean(weight * mean**2))
    assert result(rank_event_variance(sample)).statistic == pytest.approx(known, rel=1e-10)


def test_rank_with_event_variance_does_not_see_the_scale_of_the_event_days(
    abnormal: AbnormalReturns,
) -> None:
    """Event-day returns four times as large, whatever the day: the same statistic."""
    larger = replace(abnormal, returns=4 * abnormal.returns)
    one, other = (car_sample(item, WINDOW, 1.0) for item in (abnormal, larger))
    known = result(rank_event_variance(one)).statistic
    assert result(rank_event_variance(other)).statistic == pytest.approx(known, rel=1e-10)


def test_generalised_rank_z_by_the_variance_of_a_discrete_uniform(
    abnormal: AbnormalReturns, sample: CarSample
) -> None:
    """Kolari and Pynnönen 2011: scipy's variance of a uniform on 1, ..., T, deal by deal."""
    before = abnormal.estimation_returns / np.sqrt(abnormal.residual_variance)[:, None]
    cumulated = (sample.scar / sample.scar.std(ddof=1))[:, None]
    days = np.isfinite(before).sum(axis=1) + 1
    variances = [stats.randint(1, int(t) + 1).var() / (t + 1) ** 2 for t in days]
    known = ranked([before, cumulated])[-1] / np.sqrt(np.sum(variances)) * sample.n
    found = result(generalised_rank_z(sample))
    assert found.statistic == pytest.approx(known, rel=1e-10)
    assert np.sign(found.statistic) == np.sign(result(generalised_rank(sample)).statistic)


def test_rank_tests_say_why_not() -> None:
    alike = clustered(deals=4, days=1, gaps=0)
    same = replace(
        alike,
        returns=np.tile(alike.returns[0], (4, 1)),
        residual_variance=np.full(4, 4e-4),
        bread=np.tile(alike.bread[0], (4, 1, 1)),
    )
    for test in (rank_event_variance, generalised_rank_z):
        found = test(car_sample(same, WINDOW, 1.0))
        assert isinstance(found, NotApplicable)
        assert "differ" in found.reason
        assert isinstance(test(sample_of(np.ones(3), np.ones(3))), NotApplicable)


def symmetric(n: int) -> Floats:
    """n values without skewness, their mean above zero."""
    half = np.random.default_rng(n).exponential(0.03, n // 2)
    return 0.004 + np.concatenate([half, -half])


def test_without_skewness_all_three_are_the_plain_t() -> None:
    """scipy.stats.ttest_1samp; Johnson 1978 and Hall 1992 add terms in the skewness alone."""
    car = symmetric(40)[None, :]
    known = stats.ttest_1samp(car[0], 0.001).statistic
    for statistic in (student, johnson, hall):
        assert statistic(car, 0.001)[0] == pytest.approx(known, rel=1e-9)


def test_skewed_statistics_by_scipys_moments() -> None:
    """Johnson's and Hall's formulas written out with scipy's third central moment."""
    car = np.random.default_rng(8).exponential(0.03, (3, 31)) - 0.02
    n, s = 31, car.std(axis=1, ddof=1)
    g, ratio = stats.moment(car, 3, axis=1) / s**3, car.mean(axis=1) / s
    first = np.sqrt(n) * (ratio + g * ratio**2 / 3 + g / (6 * n))
    np.testing.assert_allclose(johnson(car, 0.0), first, rtol=1e-12)
    cubic = 3 / g * ((1 + g * ratio / 3) ** 3 - 1) / 3
    np.testing.assert_allclose(hall(car, 0.0), np.sqrt(n) * (cubic + g / (6 * n)), rtol=1e-10)


def test_without_skewness_the_limits_are_those_of_the_plain_t() -> None:
    """p of the bootstrapped tests against the t distribution, 400 deals without skewness."""
    made = sample_of(symmetric(400), np.full(400, 0.03))
    known = stats.ttest_1samp(made.car, 0.0).pvalue
    error = 4 * np.sqrt(2 * known / 1999)
    for test in (skewness_transformed, deal_bootstrap):
        assert result(test(made)).p_value == pytest.approx(known, abs=error + 0.01)
    # Johnson's draws a quarter of the deals, whose tails are a little longer.
    assert result(skewness_adjusted(made)).p_value == pytest.approx(known, abs=error + 0.02)


def test_the_bootstrap_by_deal_against_scipys_draws() -> None:
    """scipy.stats.bootstrap's draws of the same studentised mean: p within Monte-Carlo error."""
    car = np.random.default_rng(4).gamma(2.0, 0.02, 30) - 0.028
    found = result(deal_bootstrap(sample_of(car, np.full(30, 0.03))))
    centre, t = car.mean(), stats.ttest_1samp(car, 0.0).statistic
    drawn = stats.bootstrap(
        (car,),
        lambda x, axis=-1: (x.mean(axis) - centre) / (x.std(axis, ddof=1) / np.sqrt(30)),
        n_resamples=20_000,
        method="percentile",
        rng=np.random.default_rng(5),
    ).bootstrap_distribution
    known = np.mean(np.abs(drawn) >= abs(t))
    assert found.statistic == pytest.approx(t, rel=1e-10)
    assert found.p_value == pytest.approx(known, abs=4 * np.sqrt(known * (1 - known) / 1999))


@pytest.mark.parametrize("test", [skewness_transformed, deal_bootstrap])
def test_bootstraps_say_why_not(test: object) -> None:
    assert callable(test)
    few, alike = (sample_of(np.full(n, 0.02), np.full(n, 0.02)) for n in (5, 25))
    assert "needs at least" in test(few).reason
    assert "differ" in test(alike).reason
