"""Deals of one date as a system of regressions, against linearmodels and by hand."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from linearmodels.system import SUR
from scipy import stats

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.estimate import NotApplicable, TestResult
from pipeline.core.prices import PricePanel
from pipeline.core.window import Window
from pipeline.significance.joint_date import joint_date
from pipeline.significance.sample import car_sample
from tests.returns.panels import fitted, panel_of_returns, weekdays
from tests.significance.samples import ESTIMATION, SPAN, clustered

AT, N = 150, 7


@pytest.fixture(scope="module")
def panel() -> PricePanel:
    """Seven shares whose residuals share a factor."""
    stream = np.random.default_rng(12)
    market = stream.normal(0, 0.01, 170)
    noise = 0.6 * stream.normal(size=(170, 1)) + 0.8 * stream.normal(size=(170, N))
    returns = market[:, None] * stream.uniform(0.5, 1.5, N) + noise * stream.uniform(0.01, 0.03, N)
    returns[AT] += 0.01
    return panel_of_returns(weekdays(170), returns, market)


@pytest.fixture(scope="module")
def abnormal(panel: PricePanel) -> AbnormalReturns:
    return fitted("market_model", panel, np.arange(N), np.full(N, AT), ESTIMATION, SPAN)


def found(abnormal: AbnormalReturns, window: Window) -> TestResult:
    result = joint_date(car_sample(abnormal, window, 1.0))
    assert isinstance(result, TestResult)
    return result


@pytest.mark.parametrize("window", [Window(0, 0), Window(-1, 1), Window(0, 4)])
def test_linearmodels_gives_the_same_system(
    window: Window, panel: PricePanel, abnormal: AbnormalReturns
) -> None:
    """Seemingly unrelated regressions with a dummy a session; degrees of freedom as T - k."""
    rows = np.r_[
        AT + ESTIMATION.start : AT + ESTIMATION.end + 1, AT + window.start : AT + window.end + 1
    ]
    length = len(window)
    dummies = np.zeros((len(rows), length))
    dummies[-length:] = np.eye(length)
    names = ["constant", "market", *(f"day_{at}" for at in range(length))]
    X = np.column_stack([np.ones(len(rows)), panel.benchmark[rows], dummies])
    system = {
        f"S{at}": {
            "dependent": pd.Series(panel.returns[rows, at], name=f"S{at}"),
            "exog": pd.DataFrame(X, columns=names),
        }
        for at in range(N)
    }
    fit = SUR(system).fit(method="ols", cov_type="unadjusted", debiased=True)
    weights = np.tile(np.r_[0, 0, np.ones(length)], N) / N
    estimate = float(weights @ fit.params)
    error = float(np.sqrt(weights @ fit.cov.to_numpy() @ weights))
    result = found(abnormal, window)
    assert abnormal.car(window).mean() == pytest.approx(estimate, rel=1e-8)
    assert result.facts["std_error"] == pytest.approx(error, rel=1e-8)
    assert result.statistic == pytest.approx(estimate / error, rel=1e-8)
    p = 2 * stats.t.sf(abs(estimate / error), len(ESTIMATION) - 2)
    assert result.p_value == pytest.approx(p, rel=1e-8)


def test_it_is_the_regression_of_the_portfolio(
    panel: PricePanel, abnormal: AbnormalReturns
) -> None:
    """One day: the dummy's t in the equal-weighted portfolio's own regression, by statsmodels."""
    rows = np.r_[AT + ESTIMATION.start : AT + ESTIMATION.end + 1, AT]
    day = (rows == AT).astype(float)
    X = np.column_stack([np.ones(len(rows)), panel.benchmark[rows], day])
    fit = sm.OLS(panel.returns[rows].mean(axis=1), X).fit()
    result = found(abnormal, Window(0, 0))
    assert result.statistic == pytest.approx(fit.tvalues[2], rel=1e-9)
    assert result.df == (fit.df_resid,)


def test_all_zero_is_the_exact_f_of_the_system(
    panel: PricePanel, abnormal: AbnormalReturns
) -> None:
    """Likelihood ratio of Wilks' lambda for one dummy, by statsmodels' multivariate regression."""
    from statsmodels.multivariate.multivariate_ols import _MultivariateOLS

    rows = np.r_[AT + ESTIMATION.start : AT + ESTIMATION.end + 1, AT]
    X = np.column_stack([np.ones(len(rows)), panel.benchmark[rows], rows == AT]).astype(float)
    fit = _MultivariateOLS(panel.returns[rows], X).fit()
    table = fit.mv_test([("day", np.array([[0.0, 0.0, 1.0]]))]).results["day"]["stat"]
    facts = found(abnormal, Window(0, 0)).facts
    assert facts["each_zero_f"] == pytest.approx(float(table.loc["Wilks' lambda", "F Value"]))
    assert facts["each_zero_p"] == pytest.approx(float(table.loc["Wilks' lambda", "Pr > F"]))


def test_a_mean_of_nothing_can_hide_that_each_deal_moved(abnormal: AbnormalReturns) -> None:
    returns = np.zeros_like(abnormal.returns)
    returns[:, -SPAN.start] = 0.2 * np.array([1, -1, 1, -1, 1, -1, 0])
    result = found(replace(abnormal, returns=returns), Window(0, 0))
    assert result.statistic == pytest.approx(0.0, abs=1e-9)
    assert result.facts["each_zero_p"] < 1e-6


def test_what_has_no_answer(abnormal: AbnormalReturns) -> None:
    def reason(sample: AbnormalReturns) -> str:
        result = joint_date(car_sample(sample, Window(-1, 1), 0.5))
        assert isinstance(result, NotApplicable)
        return result.reason

    assert "one date; these lie on" in reason(clustered(deals=10, gaps=0))
    assert "at least two" in reason(abnormal.take(np.array([0])))
    holes = abnormal.estimation_returns.copy()
    holes[2, 5] = np.nan
    assert "same sessions" in reason(replace(abnormal, estimation_returns=holes))
    silent = abnormal.returns.copy()
    silent[1, -SPAN.start + 1] = np.nan
    assert "each day" in reason(replace(abnormal, returns=silent))


def test_more_deals_than_sessions_are_refused() -> None:
    """At 98 degrees of freedom 98 deals still have an answer, 99 have none."""
    many = clustered(deals=99, days=1, gaps=0)
    result = joint_date(car_sample(many, Window(0, 0), 1.0))
    assert isinstance(result, NotApplicable)
    assert "99 deals are more than the 98" in result.reason
    fewer = joint_date(car_sample(many.take(np.arange(98)), Window(0, 0), 1.0))
    assert isinstance(fewer, TestResult)
    assert np.isfinite(fewer.p_value)
