"""Measures made from prices before the announcement.

Each takes a panel, (N,) columns, (N,) positions of day zero and a window, and gives (N,) values,
NaN where fewer than 60% of the window's sessions have a return.
"""

from __future__ import annotations

import numpy as np

from pipeline.core.prices import Booleans, Floats, Integers, PricePanel
from pipeline.core.window import Window

ENOUGH = 0.6


def run_up(panel: PricePanel, column: Integers, position: Integers, window: Window) -> Floats:
    """Compounded return of the share less that of the benchmark, decimal.

    Schwert 1996, JFE 41, for the run-up before announcements; here benchmark-adjusted.
    """
    own, market, used = _gather(panel, column, position, window)
    share = np.where(used, 1 + own, 1.0).prod(axis=1)
    index = np.where(used, 1 + market, 1.0).prod(axis=1)
    return _enough(share - index, used)


def volatility(panel: PricePanel, column: Integers, position: Integers, window: Window) -> Floats:
    """Standard deviation of the residual of a market model over the window, decimal a day.

    Idiosyncratic volatility as in Moeller, Schlingemann and Stulz 2007, RFS 20.
    """
    own, market, used = _gather(panel, column, position, window)
    slope, own_c, market_c, count = _slope(own, market, used)
    residual = np.where(used, own_c - slope[:, None] * market_c, 0.0)
    with np.errstate(invalid="ignore", divide="ignore"):
        return _enough(np.sqrt((residual**2).sum(axis=1) / (count - 2)), used)


def beta(panel: PricePanel, column: Integers, position: Integers, window: Window) -> Floats:
    """Slope of the share's returns on the benchmark's over the window."""
    own, market, used = _gather(panel, column, position, window)
    return _enough(_slope(own, market, used)[0], used)


def illiquidity(panel: PricePanel, column: Integers, position: Integers, window: Window) -> Floats:
    """Mean of |return| per million of money traded (Amihud 2002, JFM 5).

    Money is close times volume in the listing's currency; sessions without volume are left out.
    """
    own, _, used = _gather(panel, column, position, window)
    at = _at(panel, position, window)[0]
    money = panel.close[at, column[:, None]] * panel.volume[at, column[:, None]] / 1e6
    traded = used & np.isfinite(money) & (money > 0)
    with np.errstate(invalid="ignore", divide="ignore"):
        ratio = np.where(traded, np.abs(own) / money, 0.0)
        return _enough(ratio.sum(axis=1) / traded.sum(axis=1), traded)


def _at(panel: PricePanel, position: Integers, window: Window) -> tuple[Integers, Booleans]:
    sessions = position[:, None] + np.arange(window.start, window.end + 1)
    inside = (sessions >= 0) & (sessions < len(panel.sessions))
    return np.clip(sessions, 0, len(panel.sessions) - 1), inside


def _gather(
    panel: PricePanel, column: Integers, position: Integers, window: Window
) -> tuple[Floats, Floats, Booleans]:
    at, inside = _at(panel, position, window)
    own, market = panel.returns[at, column[:, None]], panel.benchmark[at]
    return own, market, inside & np.isfinite(own) & np.isfinite(market)


def _slope(own: Floats, market: Floats, used: Booleans) -> tuple[Floats, Floats, Floats, Floats]:
    count = used.sum(axis=1).astype(np.float64)
    with np.errstate(invalid="ignore", divide="ignore"):
        own_c = own - (np.where(used, own, 0.0).sum(axis=1) / count)[:, None]
        market_c = market - (np.where(used, market, 0.0).sum(axis=1) / count)[:, None]
        cross = np.where(used, own_c * market_c, 0.0).sum(axis=1)
        slope = cross / np.where(used, market_c**2, 0.0).sum(axis=1)
    return slope, own_c, market_c, count


def _enough(values: Floats, used: Booleans) -> Floats:
    return np.where(used.mean(axis=1) >= ENOUGH, values, np.nan)
