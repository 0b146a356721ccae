"""Returns over several sessions matched with the benchmark over the same: Maynes and Rumsey 1993.

The fits are held against statsmodels' weighted least squares on regressors compounded one by one
in a loop; Maynes and Rumsey 1993, J. Banking & Finance 17, is the source of the regression.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import statsmodels.api as sm

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.prices import Floats, Integers, PricePanel
from pipeline.core.window import Window
from pipeline.returns.spans import Compounded
from pipeline.significance.sample import Series, car_sample
from tests.returns.panels import ESTIMATION, SPAN, fitted, invented_panel

COLUMNS, POSITIONS = [0, 1, 2, 3, 3], [205, 210, 250, 305, 140]
MODELS = ["constant_mean", "excess_return", "factor_model", "market_model"]


def spanning(close: Floats) -> tuple[Floats, Integers]:
    """(T, S) returns since the last close, and the sessions that each covers; by a loop."""
    returns, spans = np.full(close.shape, np.nan), np.ones(close.shape, dtype=np.int64)
    for column in range(close.shape[1]):
        last = -1
        for session in range(len(close)):
            if not np.isfinite(close[session, column]):
                continue
            if last >= 0:
                returns[session, column] = close[session, column] / close[last, column] - 1
                spans[session, column] = session - last
            last = session
    return returns, spans


@pytest.fixture(scope="module")
def thin() -> PricePanel:
    """Shares without a close on a fifth of the sessions, one suspended for a month."""
    panel = invented_panel(seed=8)
    stream = np.random.default_rng(1)
    close = panel.close.copy()
    close[stream.random(close.shape) < 0.2] = np.nan
    close[120:142, 1] = np.nan
    returns, spans = spanning(close)
    return replace(panel, close=close, returns=np.asfortranarray(returns), spans=spans)


def compounded(series: Floats, session: int, over: int) -> float:
    """One by one, the plain definition."""
    if session - over + 1 < 0:
        return float("nan")
    return float(np.prod(1 + series[session - over + 1 : session + 1]) - 1)


def regression(
    panel: PricePanel, model: str, column: int, sessions: Integers
) -> tuple[Floats, Floats, Floats]:
    """(m,) returns less the offset, (m, d) regressors and (m,) sessions covered."""
    spans = panel.spans[sessions, column]
    free = panel.factors["risk_free"]
    slopes = {
        "market_model": [panel.benchmark],
        "constant_mean": [],
        "factor_model": [panel.factors["market"], panel.factors["size"]],
        "excess_return": [panel.benchmark - free],
    }[model]
    offset = free if model in ("factor_model", "excess_return") else np.zeros(len(free))
    columns = [] if model == "excess_return" else [spans.astype(float)]
    for series in slopes:
        columns.append([compounded(series, t, g) for t, g in zip(sessions, spans, strict=True)])
    taken = np.array([compounded(offset, t, g) for t, g in zip(sessions, spans, strict=True)])
    return panel.returns[sessions, column] - taken, np.column_stack(columns), spans


@pytest.mark.parametrize("model", MODELS)
@pytest.mark.parametrize("row", range(len(COLUMNS)))
def test_against_weighted_least_squares(model: str, row: int, thin: PricePanel) -> None:
    """statsmodels WLS, weights one over the sessions covered; the forecast error beside it."""
    column, at = COLUMNS[row], POSITIONS[row]
    found = fitted(model, thin, COLUMNS, POSITIONS)
    rows = np.arange(at + ESTIMATION.start, at + ESTIMATION.end + 1)
    y, x, covered = regression(thin, model, column, rows)
    used = np.isfinite(y) & np.isfinite(x).all(axis=1)
    known = sm.WLS(y[used], x[used], weights=1 / covered[used]).fit()
    assert covered[used].max() > 1, "the window must hold returns over several sessions"
    assert found.observations[row] == known.nobs
    np.testing.assert_allclose(found.parameters[row], known.params, rtol=1e-9, atol=1e-13)
    np.testing.assert_allclose(found.residual_variance[row], known.mse_resid, rtol=1e-10)
    np.testing.assert_allclose(found.bread[row], known.normalized_cov_params, rtol=1e-8)
    np.testing.assert_allclose(found.estimation_returns[row, used], known.resid, atol=1e-13)
    assert np.isnan(found.estimation_returns[row, ~used]).all()
    np.testing.assert_array_equal(found.estimation_spans[row, used], covered[used])

    event = np.arange(at + SPAN.start, at + SPAN.end + 1)
    event = event[event < len(thin.sessions)]
    y, x, covered = regression(thin, model, column, event)
    there = slice(0, len(event))
    np.testing.assert_allclose(found.returns[row, there], y - x @ known.params, atol=1e-13)
    traded = np.isfinite(y)
    total = x[traded].sum(axis=0)
    variance = covered[traded].sum() * known.mse_resid + total @ known.cov_params() @ total
    assert found.car_variance(SPAN)[row] == pytest.approx(variance, rel=1e-9)
    whole = found.forecast_covariance(SPAN)[row]
    assert whole.sum() == pytest.approx(variance, rel=1e-9)
    assert np.diag(whole)[there][traded] == pytest.approx(
        known.mse_resid * covered[traded] + np.diag(x[traded] @ known.cov_params() @ x[traded].T),
        rel=1e-9,
    )


@pytest.mark.parametrize("model", [*MODELS, "market_adjusted", "local_and_global"])
def test_without_gaps_it_is_the_ordinary_fit(model: str) -> None:
    panel = invented_panel()
    spans = np.ones(panel.returns.shape, dtype=np.int64)
    plain = fitted(model, panel, COLUMNS, POSITIONS)
    other = fitted(model, replace(panel, spans=spans), COLUMNS, POSITIONS)
    for name in ("returns", "expected", "parameters", "estimation_returns", "regressors"):
        np.testing.assert_allclose(getattr(other, name), getattr(plain, name), atol=1e-12)
    np.testing.assert_allclose(other.bread, plain.bread, rtol=1e-9, atol=1e-12)
    np.testing.assert_allclose(other.car_variance(SPAN), plain.car_variance(SPAN), rtol=1e-11)
    assert plain.spans is None
    assert (other.spans == 1).all()


def test_market_adjusted_returns_compound_the_benchmark(thin: PricePanel) -> None:
    found = fitted("market_adjusted", thin, [0], [205])
    event = np.arange(205 + SPAN.start, 205 + SPAN.end + 1)
    market = [compounded(thin.benchmark, t, thin.spans[t, 0]) for t in event]
    np.testing.assert_allclose(found.returns[0], thin.returns[event, 0] - market, atol=1e-13)
    rows = np.arange(205 + ESTIMATION.start, 205 + ESTIMATION.end + 1)
    spans = thin.spans[rows, 0]
    market = [compounded(thin.benchmark, t, g) for t, g in zip(rows, spans, strict=True)]
    scaled = (thin.returns[rows, 0] - market) / np.sqrt(spans)
    assert found.residual_variance[0] == pytest.approx(np.nanmean(scaled**2), rel=1e-10)


def test_compounding_needs_every_session() -> None:
    """A session without a value, or one before the first, leaves nothing to match."""
    series = np.array([[0.01, np.nan, 0.02, 0.03, -0.01]])
    made = Compounded(series)
    at, covered = np.array([[4, 4, 2, 1, 0, 0]]), np.array([[3, 4, 1, 1, 1, 2]])
    wanted = [1.02 * 1.03 * 0.99 - 1, np.nan, 0.02, np.nan, 0.01, np.nan]
    np.testing.assert_allclose(made.over(at, covered)[0, 0], wanted, atol=1e-15)


def test_a_model_of_leads_and_lags_is_refused(thin: PricePanel) -> None:
    with pytest.raises(ValueError, match="one session each"):
        fitted("dimson", thin, [0], [205])


def test_spans_must_fit_the_panel() -> None:
    panel = invented_panel()
    for spans in (np.ones((3, 3), dtype=np.int64), np.zeros(panel.returns.shape, dtype=np.int64)):
        with pytest.raises(ValueError, match="spans"):
            replace(panel, spans=spans)


def test_samples_bring_returns_of_one_variance(thin: PricePanel) -> None:
    """Ranks compare returns over the root of the sessions they cover."""
    found: AbnormalReturns = fitted("market_model", thin, COLUMNS, POSITIONS)
    window = Window(-10, 10)
    kept = found.complete(window, 0.5)
    series = car_sample(found, window, 0.5).series
    assert isinstance(series, Series)
    before, inside = series.alike()
    spans = found.spans[kept]
    np.testing.assert_allclose(inside, found.returns[kept] / np.sqrt(spans))
    np.testing.assert_allclose(
        before, found.estimation_returns[kept] / np.sqrt(found.estimation_spans[kept])
    )
    twice = found.take(np.array([1, 0])).take(np.array([1]))
    np.testing.assert_array_equal(twice.spans, found.spans[:1])
