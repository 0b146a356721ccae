"""The fit of expected returns against statsmodels, event by event, with gaps and masks."""

from __future__ import annotations

import warnings
from dataclasses import replace
from typing import Literal

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.prices import Floats, PricePanel
from pipeline.core.window import Window
from pipeline.registry import EXPECTED_RETURNS, entry
from pipeline.returns import fit as engine
from pipeline.returns.expected import market_model
from pipeline.returns.fit import Engine, Events
from pipeline.returns.least_squares import least_squares
from pipeline.returns.measure import measure
from tests.returns.panels import (
    ESTIMATION,
    SPAN,
    fitted,
    invented_panel,
    panel_of_closes,
    panel_of_returns,
    weekdays,
)


@pytest.fixture(scope="module")
def gappy() -> PricePanel:
    """Shares that miss sessions here and there, one that starts late, one that stops."""
    panel = invented_panel(seed=5)
    close = panel.close.copy()
    close[[60, 61, 100, 150, 203], 0] = np.nan
    close[:90, 1] = np.nan
    close[206:, 2] = np.nan
    level = 1000 * np.cumprod(1 + np.nan_to_num(panel.benchmark))
    return panel_of_closes(panel.sessions, panel.securities, close, level, panel.factors)


def by_statsmodels(
    panel: PricePanel, model: str, column: int, at: int, masked: np.ndarray
) -> tuple[sm.regression.linear_model.RegressionResults, Floats]:
    """Least squares of one event on the rows it may use, and its regressors on all sessions."""
    free = panel.factors["risk_free"]
    columns = {
        "market_model": (0.0, [panel.benchmark]),
        "constant_mean": (0.0, []),
        "factor_model": (free, [panel.factors["market"], panel.factors["size"]]),
    }
    offset, regressors = columns[model]
    x = np.column_stack([np.ones(len(free)), *regressors])
    y = panel.returns[:, column] - offset
    rows = np.arange(at + ESTIMATION.start, at + ESTIMATION.end + 1)
    usable = np.isfinite(y[rows]) & np.isfinite(x[rows]).all(axis=1) & ~masked
    return sm.OLS(y[rows][usable], x[rows][usable]).fit(), x


@pytest.mark.parametrize("model", ["market_model", "constant_mean", "factor_model"])
@pytest.mark.parametrize(("column", "at"), [(0, 205), (1, 200), (2, 205), (3, 250)])
def test_parameters_errors_and_returns(model: str, column: int, at: int, gappy: PricePanel) -> None:
    """statsmodels OLS, the same rows; sums centred first agree to 1e-10."""
    masked = np.zeros((1, len(ESTIMATION)), dtype=np.bool_)
    masked[0, 40:51] = True
    found = fitted(model, gappy, [column], [at], masked=masked)
    known, x = by_statsmodels(gappy, model, column, at, masked[0])
    assert found.observations[0] == known.nobs
    assert found.degrees_of_freedom[0] == known.df_resid
    assert found.mean_parameters == len(known.params)
    np.testing.assert_allclose(found.parameters[0], known.params, rtol=1e-9, atol=1e-14)
    np.testing.assert_allclose(found.residual_variance[0], known.mse_resid, rtol=1e-10)
    np.testing.assert_allclose(found.bread[0], known.normalized_cov_params, rtol=1e-9, atol=1e-9)
    used = np.isfinite(found.estimation_returns[0])
    np.testing.assert_allclose(found.estimation_returns[0, used], known.resid, atol=1e-14)
    event = np.arange(at + SPAN.start, at + SPAN.end + 1)
    offset = gappy.factors["risk_free"][event] if model == "factor_model" else 0.0
    expected = x[event] @ known.params + offset
    np.testing.assert_allclose(found.expected[0], expected, atol=1e-14)
    np.testing.assert_allclose(
        found.returns[0], gappy.returns[event, column] - expected, atol=1e-14
    )
    np.testing.assert_array_equal(found.days[0], gappy.sessions[event])


def test_masked_and_missing_sessions_are_not_used(gappy: PricePanel) -> None:
    masked = np.zeros((1, len(ESTIMATION)), dtype=np.bool_)
    masked[0, :10] = True
    found = fitted("market_model", gappy, [0], [205], masked=masked)
    unused = ~np.isfinite(found.estimation_returns[0])
    sessions = np.arange(205 + ESTIMATION.start, 205 + ESTIMATION.end + 1)
    # A gap costs its own return and the one after it; 60 and 61 lie before the window.
    missing = np.isin(sessions, [100, 101, 150, 151])
    np.testing.assert_array_equal(unused, masked[0] | missing)
    assert found.observations[0] == len(ESTIMATION) - 10 - 4


def test_market_adjusted_has_no_parameter(gappy: PricePanel) -> None:
    """Variance about zero, by M: Brown and Warner 1980."""
    found = fitted("market_adjusted", gappy, [3], [250])
    rows = np.arange(250 + ESTIMATION.start, 250 + ESTIMATION.end + 1)
    difference = gappy.returns[rows, 3] - gappy.benchmark[rows]
    assert found.mean_parameters == 0
    np.testing.assert_allclose(found.residual_variance[0], np.mean(difference**2), rtol=1e-12)
    np.testing.assert_allclose(
        found.car_variance(Window(-1, 1)), 3 * np.mean(difference**2), rtol=1e-12
    )


def test_factor_model_without_a_risk_free_return() -> None:
    panel = invented_panel()
    bare = panel_of_closes(
        panel.sessions,
        panel.securities,
        panel.close,
        1000 * np.cumprod(1 + np.nan_to_num(panel.benchmark)),
        {"market": np.nan_to_num(panel.benchmark)},
    )
    one, other = fitted("factor_model", bare, [2], [250]), fitted("market_model", bare, [2], [250])
    np.testing.assert_allclose(one.returns, other.returns, atol=1e-14)


@pytest.mark.parametrize("flat", [0.0, 0.001])
def test_a_benchmark_that_never_moves_gives_no_fit(flat: float) -> None:
    """No slope, so no number: not a residual variance of zero, and not rounding blown up."""
    panel = invented_panel()
    level = 1000 * (1 + flat) ** np.arange(len(panel.sessions))
    stale = panel_of_closes(panel.sessions, panel.securities, panel.close, level)
    found = fitted("market_model", stale, [0], [250])
    assert np.isnan(found.residual_variance).all()
    assert np.isnan(found.parameters).all()
    assert np.isnan(found.returns).all()
    assert not found.complete(Window(0, 0)).any()


def test_collinear_factors_give_no_fit() -> None:
    panel = invented_panel()
    factors = {"market": panel.factors["market"], "twice": 2 * panel.factors["market"]}
    level = 1000 * np.cumprod(1 + np.nan_to_num(panel.benchmark))
    twin = panel_of_closes(panel.sessions, panel.securities, panel.close, level, factors)
    assert np.isnan(fitted("factor_model", twin, [0], [250]).residual_variance).all()


@pytest.mark.parametrize("model", ["market_model", "market_adjusted", "constant_mean"])
def test_days_outside_the_panel_are_missing(model: str) -> None:
    panel = invented_panel(sessions=200)
    found = fitted(model, panel, [0], [195])
    inside = np.arange(SPAN.start, SPAN.end + 1) + 195 < 200
    for values in (found.returns, found.expected):
        np.testing.assert_array_equal(np.isfinite(values[0]), inside)
    np.testing.assert_array_equal(~np.isnat(found.days[0]), inside)


def test_an_event_before_its_estimation_window_has_no_observation() -> None:
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        found = fitted("market_model", invented_panel(), [0, 1], [15, 250])
    assert found.observations.tolist() == [0, len(ESTIMATION)]
    assert np.isnan(found.residual_variance).tolist() == [True, False]


def test_chunks_change_nothing(monkeypatch: pytest.MonkeyPatch) -> None:
    """Many events at once are each event alone, wherever the chunks end."""
    panel = invented_panel(securities=5)
    stream = np.random.default_rng(0)
    columns, positions = stream.integers(0, 5, 23), stream.integers(130, 300, 23)
    whole = fitted("market_model", panel, columns, positions)
    monkeypatch.setattr(engine, "CHUNK", 4)
    parts = fitted("market_model", panel, columns, positions)
    assert parts.deals == whole.deals
    np.testing.assert_array_equal(parts.returns, whole.returns)
    for row in (0, 7, 22):
        alone = fitted("market_model", panel, columns[[row]], positions[[row]])
        np.testing.assert_allclose(alone.returns[0], whole.returns[row], atol=1e-15)


@pytest.mark.parametrize(
    "model", ["market_model", "market_adjusted", "constant_mean", "excess_return", "factor_model"]
)
@pytest.mark.parametrize("order", ["F", "C"])
@pytest.mark.parametrize("gaps", [0.0, 0.005, 0.2])
def test_shared_equations_give_what_single_regressions_give(
    model: str, order: Literal["F", "C"], gaps: float
) -> None:
    """Windows whole, with gaps and masked sessions: one regression an event, to 1e-10."""
    panel = invented_panel(securities=9, seed=12)
    stream = np.random.default_rng(3)
    returns = np.array(panel.returns, order=order)
    returns[stream.random(returns.shape) < gaps] = np.nan
    panel = replace(panel, returns=returns)
    columns, positions = stream.integers(0, 9, 60), stream.integers(110, 305, 60)
    events = Events(columns, positions, stream.random((60, len(ESTIMATION))) < gaps / 10)
    made = entry(EXPECTED_RETURNS, model).load()(panel)
    results = []
    for whole in (True, False):
        one = Engine(made, panel, ESTIMATION, SPAN)
        assert one.shared is not None
        assert 0 < one.shared.inside(positions).sum() < 60
        one.shared = one.shared if whole else None
        arrays = one.blank(60)
        one.fit_into(arrays, np.arange(60), events)
        results.append(arrays)
    for name, values in results[0].items():
        np.testing.assert_allclose(
            values.astype(float), results[1][name].astype(float), rtol=1e-10, atol=1e-13
        )


def test_a_factor_far_from_its_mean_over_the_panel_keeps_its_digits() -> None:
    """A factor that changes level by ten thousand times its movement, against numpy's lstsq."""
    panel = invented_panel()
    stream = np.random.default_rng(1)
    level = np.where(np.arange(320) < 160, 0.05, -0.05)
    factor = level + stream.normal(0, 1e-5, 320)
    stepped = replace(panel, factors={"market": panel.factors["market"], "step": factor})
    found = fitted("factor_model", stepped, [0, 1, 2], [150, 300, 310])
    for row, (column, at) in enumerate([(0, 150), (1, 300), (2, 310)]):
        rows = np.arange(at + ESTIMATION.start, at + ESTIMATION.end + 1)
        moved = factor[rows] - factor[rows].mean()
        x = np.column_stack([np.ones(len(rows)), stepped.factors["market"][rows], moved])
        wanted, left = np.linalg.lstsq(x, panel.returns[rows, column])[:2]
        np.testing.assert_allclose(found.parameters[row, 1:], wanted[1:], rtol=1e-9)
        np.testing.assert_allclose(
            found.residual_variance[row], left[0] / (len(rows) - 3), rtol=1e-10
        )


def test_far_from_zero_no_digit_is_lost() -> None:
    """Means are taken off first: a constant of a million leaves the slope as it was."""
    stream = np.random.default_rng(2)
    x, noise = stream.normal(size=(1, 200)), stream.normal(size=(1, 200)) * 1e-3
    y = 1e6 + 2 * x + noise
    parameters, _, _ = least_squares(y, x[None])
    wanted, _, _ = least_squares(y - 1e6, x[None])
    np.testing.assert_allclose(parameters[0, 1], wanted[0, 1], rtol=1e-9)


@pytest.fixture(scope="module")
def two_exchanges() -> tuple[dict[str, PricePanel], pd.DataFrame]:
    panels = {"XLON": invented_panel(seed=1), "XNYS": invented_panel(seed=2)}
    stream = np.random.default_rng(9)
    n = 14
    located = pd.DataFrame(
        {
            "deal_id": [f"D{at:02d}" for at in range(n)],
            "exchange": stream.choice(["XNYS", "XLON"], n),
            "column": stream.integers(0, 6, n),
            "position": stream.integers(150, 300, n),
        }
    )
    return panels, located


def test_measure_keeps_the_order_of_the_deals(
    two_exchanges: tuple[dict[str, PricePanel], pd.DataFrame],
) -> None:
    panels, located = two_exchanges
    masked = np.zeros((len(located), len(ESTIMATION)), dtype=np.bool_)
    masked[3, :7] = True
    found = measure("market_model", market_model, located, masked, panels, ESTIMATION, SPAN)
    assert found.deals == tuple(located["deal_id"])
    assert found.observations[3] == len(ESTIMATION) - 7
    for row, event in enumerate(located.itertuples()):
        own = masked[[row]]
        alone = fitted(
            "market_model", panels[event.exchange], [event.column], [event.position], masked=own
        )
        np.testing.assert_allclose(found.returns[row], alone.returns[0], atol=1e-15)


def test_reproduces_the_expected_plus_abnormal_return(
    two_exchanges: tuple[dict[str, PricePanel], pd.DataFrame],
) -> None:
    panels, located = two_exchanges
    masked = np.zeros((len(located), len(ESTIMATION)), dtype=np.bool_)
    for key in ("market_model", "market_adjusted", "constant_mean", "factor_model"):
        model = entry(EXPECTED_RETURNS, key).load()
        found: AbnormalReturns = measure(key, model, located, masked, panels, ESTIMATION, SPAN)
        for row, event in enumerate(located.itertuples()):
            days = np.arange(event.position + SPAN.start, event.position + SPAN.end + 1)
            days = days[days < 320]
            raw = panels[event.exchange].returns[days, event.column]
            total = (found.returns + found.expected)[row, : len(days)]
            np.testing.assert_allclose(total, raw, atol=1e-15)


def test_known_numbers_by_hand() -> None:
    """Six sessions on paper: slope 18/10, constant 1%, so 5% on a 1% market leaves 2.2%."""
    market = np.array([-0.02, -0.01, 0.0, 0.01, 0.02, 0.01])
    share = np.array([-0.03, 0.0, 0.01, 0.02, 0.05, 0.05])
    panel = panel_of_returns(weekdays(6), share[:, None], market)
    found = fitted("market_model", panel, [0], [5], Window(-5, -1), Window(0, 0))
    np.testing.assert_allclose(found.parameters[0], [0.01, 1.8], rtol=1e-12)
    np.testing.assert_allclose(found.returns[0], 0.022, rtol=1e-12)
