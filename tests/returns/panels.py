"""Invented prices and events for the tests of abnormal returns."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.prices import Booleans, Dates, Floats, Integers, PricePanel
from pipeline.core.window import Window
from pipeline.registry import EXPECTED_RETURNS, entry
from pipeline.returns.fit import Events, fit_events
from pipeline.returns.panel import simple_returns

ESTIMATION = Window(-120, -21)
SPAN = Window(-10, 10)


def weekdays(count: int, first: str = "2015-01-02") -> Dates:
    """``count`` weekdays from ``first`` on."""
    return np.busday_offset(np.datetime64(first, "D"), np.arange(count), roll="forward")


def panel_of_closes(
    days: Dates,
    securities: Sequence[str],
    close: Floats,
    level: Floats,
    factors: Mapping[str, Floats] | None = None,
    exchange: str = "XLON",
) -> PricePanel:
    """A panel from (T, S) closes and a (T,) index level."""
    return PricePanel(
        exchange=exchange,
        sessions=days,
        securities=tuple(securities),
        close=close,
        volume=np.full(close.shape, 1000.0),
        returns=simple_returns(close),
        benchmark=simple_returns(level[:, None])[:, 0],
        factors=dict(factors or {}),
    )


def panel_of_returns(days: Dates, returns: Floats, benchmark: Floats) -> PricePanel:
    """A panel from the (T, S) returns and (T,) benchmark returns themselves."""
    return PricePanel(
        exchange="XLON",
        sessions=days,
        securities=tuple(f"S{at:02d}" for at in range(returns.shape[1])),
        close=np.cumprod(1 + np.nan_to_num(returns), axis=0),
        volume=np.full(returns.shape, 1000.0),
        returns=returns,
        benchmark=benchmark,
        factors={},
    )


def invented_panel(sessions: int = 320, securities: int = 6, seed: int = 3) -> PricePanel:
    """Shares with betas around one, a benchmark, two factors and a risk-free return."""
    stream = np.random.default_rng(seed)
    market = stream.normal(0.0004, 0.01, sessions)
    size = stream.normal(0.0, 0.006, sessions)
    beta = stream.uniform(0.5, 1.6, securities)
    moves = (
        market[:, None] * beta
        + size[:, None] * stream.normal(0, 0.5, securities)
        + stream.normal(0, 1, (sessions, securities)) * stream.uniform(0.01, 0.03, securities)
    )
    return panel_of_closes(
        weekdays(sessions),
        [f"S{at:02d}" for at in range(securities)],
        100 * np.cumprod(1 + moves, axis=0),
        1000 * np.cumprod(1 + market),
        {
            "market": market - 0.0001,
            "size": size,
            "risk_free": np.full(sessions, 0.0001),
            "global_market": 0.5 * market + stream.normal(0, 0.005, sessions),
        },
    )


def fitted(
    model: str,
    panel: PricePanel,
    columns: Sequence[int] | Integers,
    positions: Sequence[int] | Integers,
    estimation: Window = ESTIMATION,
    span: Window = SPAN,
    masked: Booleans | None = None,
) -> AbnormalReturns:
    """Abnormal returns of the events at ``columns`` and ``positions`` under a registered model."""
    mean_model = entry(EXPECTED_RETURNS, model).load()(panel)
    n = len(columns)
    none = np.zeros((n, len(estimation)), dtype=np.bool_)
    events = Events(
        column=np.asarray(columns, dtype=np.int64),
        position=np.asarray(positions, dtype=np.int64),
        masked=none if masked is None else masked,
    )
    deals = tuple(f"D{at:03d}" for at in range(n))
    return fit_events(model, deals, mean_model, panel, events, estimation, span)
