"""Each test of the mean abnormal return against an independent computation."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from pipeline.core.estimate import NotApplicable, Tested, TestResult
from pipeline.core.prices import Floats
from pipeline.significance.parametric import (
    cross_sectional,
    dependence_adjusted,
    patell,
    single_event,
    standardised_cross_sectional,
)
from pipeline.significance.sample import CarSample, car_sample
from tests.significance.samples import WINDOW, clustered, linked, sample_of


def result(test: Tested) -> TestResult:
    assert isinstance(test, TestResult), test
    return test


@pytest.fixture(params=[2, 7, 60])
def drawn(request: pytest.FixtureRequest) -> tuple[Floats, Floats]:
    """CARs with a mean above zero and unequal forecast errors."""
    stream = np.random.default_rng(request.param)
    std_dev = stream.uniform(0.01, 0.05, request.param)
    return 0.01 + stream.normal(size=request.param) * std_dev, std_dev


def test_cross_sectional_is_the_one_sample_t(drawn: tuple[Floats, Floats]) -> None:
    """scipy.stats.ttest_1samp; Brown and Warner 1980."""
    found, known = result(cross_sectional(sample_of(*drawn))), stats.ttest_1samp(drawn[0], 0.0)
    assert found.statistic == pytest.approx(known.statistic, rel=1e-12)
    assert found.p_value == pytest.approx(known.pvalue, rel=1e-9)
    assert found.df == (float(known.df),)


def test_standardised_is_the_one_sample_t_of_scars(drawn: tuple[Floats, Floats]) -> None:
    """scipy.stats.ttest_1samp of CAR over its forecast error; Boehmer et al. 1991."""
    known = stats.ttest_1samp(drawn[0] / drawn[1], 0.0)
    found = result(standardised_cross_sectional(sample_of(*drawn)))
    assert found.statistic == pytest.approx(known.statistic, rel=1e-12)
    assert found.p_value == pytest.approx(known.pvalue, rel=1e-9)


def test_patell_by_the_variance_of_a_student_t(drawn: tuple[Floats, Floats]) -> None:
    """A SCAR is t with M - d degrees of freedom, whose variance scipy knows; Patell 1976."""
    car, std_dev = drawn
    df = np.arange(len(car)) % 5 + 60
    sample = CarSample(WINDOW, car, car / std_dev, std_dev, df, sample_of(car, std_dev).dependence)
    known = np.sum(car / std_dev) / np.sqrt(sum(stats.t(float(v)).var() for v in df))
    found = result(patell(sample))
    assert found.statistic == pytest.approx(known, rel=1e-12)
    assert found.p_value == pytest.approx(2 * stats.norm.sf(abs(known)), rel=1e-9)
    assert found.distribution == "normal"


@pytest.mark.parametrize("weighted", [0.0, 0.02, 0.3])
def test_dependence_adjusted_in_two_other_forms(
    weighted: float, drawn: tuple[Floats, Floats]
) -> None:
    """Kolari and Pynnönen 2010, eq. 9 to 11: the variance of the mean of n equally correlated
    variables is s²(1 + (n-1) r) / (n (1 - r)), s² being the sample variance."""
    car, std_dev = drawn
    n, scar = len(car), car / std_dev
    error = np.sqrt(scar.var(ddof=1) * (1 + (n - 1) * weighted) / (n * (1 - weighted)))
    found = result(dependence_adjusted(sample_of(car, std_dev, link=linked(weighted))))
    assert found.statistic == pytest.approx(scar.mean() / error, rel=1e-12)
    assert found.df == (n - 1.0,)
    plain = result(standardised_cross_sectional(sample_of(car, std_dev)))
    assert abs(found.statistic) <= abs(plain.statistic) * (1 + 1e-12)
    assert (found.statistic == pytest.approx(plain.statistic)) == (weighted == 0.0)


def test_negative_correlation_gives_no_credit(drawn: tuple[Floats, Floats]) -> None:
    """The raw value is reported, and floored at zero where it would sharpen the test."""
    one = result(dependence_adjusted(sample_of(*drawn, link=linked(-0.05))))
    other = result(standardised_cross_sectional(sample_of(*drawn)))
    assert one.statistic == pytest.approx(other.statistic)
    assert one.facts["weighted_correlation"] == -0.05


def test_the_adjustment_undoes_equal_correlation() -> None:
    """The sample variance of equally correlated draws is s²(1 - r) on average, and their mean
    varies by s²(1 + (n-1) r)/n: the adjusted t then has a variance near one."""
    n, r = 25, 0.25
    stream = np.random.default_rng(0)
    common, own = stream.normal(size=(4000, 1)), stream.normal(size=(4000, n))
    draws = np.sqrt(r) * common + np.sqrt(1 - r) * own
    ones, link = np.ones(n), linked(r)
    found = np.array(
        [result(dependence_adjusted(sample_of(row, ones, link=link))).statistic for row in draws]
    )
    raw = np.array(
        [result(standardised_cross_sectional(sample_of(row, ones))).statistic for row in draws]
    )
    # The variance of t(24) is 24/22; four Monte-Carlo standard errors of a variance are 9%.
    assert found.var() == pytest.approx(24 / 22, rel=0.12)
    assert raw.var() > 8


def test_a_single_deal_speaks_for_itself() -> None:
    """Student t with M - d degrees of freedom: MacKinlay 1997, sec. 5."""
    found = result(single_event(sample_of(np.array([0.06]), np.array([0.02]), df=58)))
    assert found.statistic == pytest.approx(3.0)
    assert found.p_value == pytest.approx(2 * stats.t.sf(3.0, 58), rel=1e-10)


NEEDS_SEVERAL = (cross_sectional, standardised_cross_sectional, dependence_adjusted)


@pytest.mark.parametrize("test", NEEDS_SEVERAL)
def test_tests_of_several_deals_say_why_not(test: object) -> None:
    assert callable(test)
    one = test(sample_of(np.array([0.06]), np.array([0.02])))
    none = test(sample_of(np.empty(0), np.empty(0)))
    alike = test(sample_of(np.array([0.02, 0.02]), np.array([0.01, 0.01])))
    for found, word in ((one, "two deals"), (none, "two deals"), (alike, "differ")):
        assert isinstance(found, NotApplicable)
        assert word in found.reason


def test_patell_and_the_single_deal_say_why_not() -> None:
    none = sample_of(np.empty(0), np.empty(0))
    short = sample_of(np.array([0.02, 0.01]), np.array([0.01, 0.01]), df=2)
    several = sample_of(np.array([0.02, 0.01]), np.array([0.01, 0.01]))
    for found in (patell(none), patell(short), single_event(none), single_event(several)):
        assert isinstance(found, NotApplicable)
        assert found.reason


def test_a_sample_holds_the_deals_that_traded() -> None:
    abnormal = clustered(gaps=0)
    missing = abnormal.returns.copy()
    missing[[2, 5], 5] = np.nan  # day 0
    missing[7, 6] = np.nan  # day +1
    gappy = replace(abnormal, returns=missing)
    assert car_sample(gappy, WINDOW, 1.0).n == 13
    most = car_sample(gappy, WINDOW, 0.6)
    assert most.n == 14
    kept = np.delete(np.arange(16), [2, 5])
    np.testing.assert_allclose(most.car, gappy.car(WINDOW)[kept])
    np.testing.assert_allclose(most.std_dev**2, gappy.car_variance(WINDOW)[kept])
    np.testing.assert_allclose(most.scar, gappy.standardised(WINDOW)[kept])
    np.testing.assert_array_equal(most.df, gappy.degrees_of_freedom[kept])
