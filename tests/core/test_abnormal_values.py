"""Windows and abnormal returns as values: cumulation, buy-and-hold, forecast errors, gaps.

Forecast errors: Patell 1976, JAR 14; Campbell, Lo and MacKinlay 1997, ch. 4; checked against
statsmodels' prediction errors.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import statsmodels.api as sm

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.window import Window
from tests.returns.panels import ESTIMATION, SPAN, fitted, invented_panel

COLUMNS, POSITIONS = [0, 1, 2, 3, 4], [200, 210, 250, 300, 260]
WINDOWS = [Window(0, 0), Window(-1, 1), Window(-10, 10), Window(2, 7)]


@pytest.fixture(scope="module")
def market_model() -> AbnormalReturns:
    return fitted("market_model", invented_panel(), COLUMNS, POSITIONS)


@pytest.fixture(scope="module")
def factor_model() -> AbnormalReturns:
    return fitted("factor_model", invented_panel(), COLUMNS, POSITIONS)


@pytest.fixture
def gappy(market_model: AbnormalReturns) -> AbnormalReturns:
    """The second deal misses day +1, the third day 0."""
    returns = market_model.returns.copy()
    returns[1, 11] = np.nan
    returns[2, 10] = np.nan
    return replace(market_model, returns=returns)


def test_windows_in_words_and_numbers() -> None:
    assert Window(-1, 1).label == "[-1, +1]"
    assert Window(0, 0).label == "[0, 0]"
    assert Window(-250, -31).label == "[-250, -31]"
    assert len(Window(-1, 1)) == 3
    assert Window(-5, -3).overlaps(Window(-3, 2))
    assert not Window(-5, -3).overlaps(Window(-2, 2))
    assert sorted([Window(0, 1), Window(-1, 3), Window(-1, 1)])[0] == Window(-1, 1)
    with pytest.raises(ValueError, match="before its start"):
        Window(1, 0)


@pytest.mark.parametrize("window", WINDOWS, ids=lambda window: window.label)
def test_market_model_forecast_variance_in_closed_form(
    window: Window, market_model: AbnormalReturns
) -> None:
    """s² [L + L²/M + (sum of the market's deviations)² / its sum of squares]: Campbell, Lo and
    MacKinlay 1997, eq. 4.4.13, written out for one regressor."""
    panel = invented_panel()
    for row, position in enumerate(POSITIONS):
        before = panel.benchmark[position + ESTIMATION.start : position + ESTIMATION.end + 1]
        inside = panel.benchmark[position + window.start : position + window.end + 1]
        deviation = np.sum(inside - before.mean())
        spread = np.sum((before - before.mean()) ** 2)
        L, M = len(window), len(before)
        closed = market_model.residual_variance[row] * (L + L**2 / M + deviation**2 / spread)
        np.testing.assert_allclose(market_model.car_variance(window)[row], closed, rtol=1e-11)


@pytest.mark.parametrize("window", WINDOWS, ids=lambda window: window.label)
def test_factor_model_forecast_covariance_by_statsmodels(
    window: Window, factor_model: AbnormalReturns
) -> None:
    """statsmodels gives the covariance of the predicted means; a forecast adds s² on each day."""
    panel = invented_panel()
    x = np.column_stack(
        [np.ones(len(panel.sessions)), panel.factors["market"], panel.factors["size"]]
    )
    for row, (column, position) in enumerate(zip(COLUMNS, POSITIONS, strict=True)):
        before = slice(position + ESTIMATION.start, position + ESTIMATION.end + 1)
        inside = slice(position + window.start, position + window.end + 1)
        y = panel.returns[before, column] - panel.factors["risk_free"][before]
        known = sm.OLS(y, x[before]).fit()
        prediction = known.get_prediction(x[inside])
        covariance = x[inside] @ known.cov_params() @ x[inside].T
        np.testing.assert_allclose(np.diag(covariance), prediction.var_pred_mean, rtol=1e-10)
        forecast = covariance + known.mse_resid * np.eye(len(window))
        found = factor_model.forecast_covariance(window)[row]
        np.testing.assert_allclose(found, forecast, rtol=1e-9, atol=1e-16)
        np.testing.assert_allclose(np.diag(found), prediction.se_obs**2, rtol=1e-9)
        np.testing.assert_allclose(factor_model.car_variance(window)[row], forecast.sum())


@pytest.mark.parametrize("window", WINDOWS, ids=lambda window: window.label)
def test_variance_of_the_sum_is_the_sum_of_the_covariance(
    window: Window, gappy: AbnormalReturns
) -> None:
    covariance = gappy.forecast_covariance(window)
    np.testing.assert_allclose(gappy.car_variance(window), covariance.sum(axis=(1, 2)), rtol=1e-12)
    assert np.linalg.eigvalsh(covariance).min() > -1e-18
    traded = covariance.sum(axis=(1, 2)) > 0
    scar = gappy.car(window)[traded] / np.sqrt(covariance.sum(axis=(1, 2))[traded])
    np.testing.assert_allclose(gappy.standardised(window)[traded], scar)
    assert np.isnan(gappy.standardised(window)[~traded]).all()


def test_a_missing_day_is_not_a_zero(gappy: AbnormalReturns) -> None:
    window = Window(-1, 1)
    assert gappy.complete(window).tolist() == [True, False, False, True, True]
    assert gappy.complete(window, 0.6).tolist() == [True, True, False, True, True]
    assert gappy.complete(Window(-10, -1)).all()
    assert gappy.complete(Window(-10, 10), 0.96).tolist() == [True, False, False, True, True]
    two_days = gappy.returns[1, [9, 10]]
    np.testing.assert_allclose(gappy.car(window)[1], two_days.sum(), rtol=1e-12)
    covariance = gappy.forecast_covariance(window)[1]
    assert (covariance[2] == 0).all()
    assert (covariance[:, 2] == 0).all()


def test_buy_and_hold_by_products(gappy: AbnormalReturns) -> None:
    """Product of 1 + R less product of 1 + E[R] over the traded days: Barber and Lyon 1997."""
    window = Window(-1, 1)
    for row in range(5):
        own = slice(9, 12)
        traded = np.isfinite(gappy.returns[row, own])
        expected = gappy.expected[row, own][traded]
        realised = gappy.returns[row, own][traded] + expected
        by_hand = np.prod(1 + realised) - np.prod(1 + expected)
        np.testing.assert_allclose(gappy.bhar(window)[row], by_hand, rtol=1e-10)


def test_buy_and_hold_is_the_same_from_logarithmic_returns(gappy: AbnormalReturns) -> None:
    """A portfolio's value does not depend on how its daily moves are written down."""
    realised, expected = np.log1p(gappy.returns + gappy.expected), np.log1p(gappy.expected)
    logs = replace(gappy, returns=realised - expected, expected=expected)
    for window in (Window(0, 0), Window(-1, 1), Window(-10, 10)):
        np.testing.assert_allclose(
            logs.bhar(window, log=True), gappy.bhar(window), rtol=1e-10, atol=1e-15
        )
    assert np.abs(logs.bhar(Window(-10, 10)) - gappy.bhar(Window(-10, 10))).max() > 1e-4


def test_degrees_of_freedom_count_the_mean_parameters(
    market_model: AbnormalReturns, factor_model: AbnormalReturns
) -> None:
    assert market_model.mean_parameters == 2
    assert factor_model.mean_parameters == 3
    assert (market_model.degrees_of_freedom == 98).all()
    assert (factor_model.degrees_of_freedom == 97).all()


@pytest.mark.parametrize("window", [Window(-11, 0), Window(0, 11)])
def test_days_not_held_are_refused(window: Window, market_model: AbnormalReturns) -> None:
    for use in (market_model.car, market_model.car_variance, market_model.bhar):
        with pytest.raises(ValueError, match="outside the days held"):
            use(window)


def test_shapes_that_disagree_are_refused(market_model: AbnormalReturns) -> None:
    with pytest.raises(ValueError, match="abnormal returns"):
        replace(market_model, returns=market_model.returns[:, 1:])
    with pytest.raises(ValueError, match="bread"):
        replace(market_model, bread=market_model.bread[1:])


def test_taking_events(market_model: AbnormalReturns) -> None:
    rows = np.array([3, 0, 4])
    taken = market_model.take(rows)
    assert taken.deals == ("D003", "D000", "D004")
    np.testing.assert_array_equal(taken.returns, market_model.returns[rows])
    keep = np.array([True, False, False, True, False])
    assert market_model.select(keep).deals == ("D000", "D003")
    assert taken.span == SPAN
    np.testing.assert_array_equal(taken.bread[1], market_model.bread[0])
