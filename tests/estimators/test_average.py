"""The mean of an outcome, its deals independent or moving together in clusters."""

from __future__ import annotations

import numpy as np
import pytest
import statsmodels.api as sm
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from pipeline.estimators.average import average

DRAWN = np.random.default_rng(11).gamma(2.0, 0.2, 60)
DATES = np.repeat(np.arange(15), 4)


def test_independent_deals_have_the_t_interval_of_a_mean() -> None:
    found = average(DRAWN, None, 0.9)
    low, high = stats.t.interval(0.9, 59, DRAWN.mean(), stats.sem(DRAWN))
    assert (found.mean, found.low, found.high) == pytest.approx((DRAWN.mean(), low, high))
    assert (found.df, found.clusters) == (59, 0)


def test_clusters_give_the_error_of_a_regression_on_a_constant() -> None:
    fit = sm.OLS(DRAWN, np.ones(60)).fit(cov_type="cluster", cov_kwds={"groups": DATES})
    found = average(DRAWN, DATES, 0.95)
    assert found.std_error == pytest.approx(float(fit.bse[0]), rel=1e-12)
    assert (found.df, found.clusters) == (14, 15)
    assert found.high - found.mean == pytest.approx(stats.t.ppf(0.975, 14) * found.std_error)


def test_every_deal_a_cluster_is_no_cluster() -> None:
    alone, none = average(DRAWN, np.arange(60), 0.95), average(DRAWN, None, 0.95)
    assert alone.std_error == pytest.approx(none.std_error, rel=1e-12)


@pytest.mark.parametrize("values, codes", [(DRAWN[:1], None), (DRAWN, np.zeros(60, dtype=int))])
def test_one_deal_or_one_cluster_gives_no_interval(values: np.ndarray, codes: object) -> None:
    found = average(values, codes, 0.95)  # type: ignore[arg-type]
    assert found.mean == pytest.approx(values.mean())
    assert np.isnan([found.std_error, found.low, found.high]).all()


@given(st.floats(-5, 5), st.floats(0.01, 100))
def test_shift_and_unit_carry_over(shift: float, scale: float) -> None:
    plain, moved = average(DRAWN, DATES, 0.95), average(shift + scale * DRAWN, DATES, 0.95)
    assert moved.mean == pytest.approx(shift + scale * plain.mean)
    assert moved.std_error == pytest.approx(scale * plain.std_error, rel=1e-9)
