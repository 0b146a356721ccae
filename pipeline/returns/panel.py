"""Price panels: long tables laid on each exchange's sessions, and cross-checks of the two."""

from __future__ import annotations

from collections.abc import Iterable, Mapping

import numpy as np
import pandas as pd

from pipeline.core.findings import Finding, Severity
from pipeline.core.prices import Dates, Floats, PricePanel
from pipeline.returns.sessions import CalendarChange, Sessions, changed, sessions_between

CLOSED_SHARE = 0.5
OFF_SESSION_SHARE = 0.02
SPLIT_FACTORS = np.array([2, 3, 4, 5, 10, 20, 1 / 2, 1 / 3, 1 / 4, 1 / 5, 1 / 10, 1 / 20])
SPLIT_TOLERANCE = 0.03
CALM_BENCHMARK = 0.05


def build_panels(
    listings: pd.DataFrame,
    prices: pd.DataFrame,
    benchmarks: pd.DataFrame,
    factors: pd.DataFrame | None,
    factor_names: tuple[str, ...],
    changes: Mapping[str, CalendarChange] | None = None,
) -> tuple[dict[str, PricePanel], dict[str, Sessions], list[Finding]]:
    """One panel an exchange, with findings about prices, benchmark and calendar.

    Args:
        listings: security, exchange: one row a security.
        prices: security, date, close, volume.
        benchmarks: exchange, date, close.
        factors: exchange, date, one column a factor; or None.
        factor_names: the factor columns to keep.
        changes: exchange -> what the desk knows better than its calendar.
    """
    panels: dict[str, PricePanel] = {}
    calendars: dict[str, Sessions] = {}
    findings: list[Finding] = []
    first, last = prices["date"].min(), prices["date"].max()
    for exchange, listed in listings.groupby("exchange", sort=True):
        name = str(exchange)
        # A margin of days lets an announcement after the last price still be placed.
        sessions = sessions_between(
            name, f"{first:%Y-%m-%d}", f"{last + pd.Timedelta(days=10):%Y-%m-%d}"
        )
        if changes and name in changes:
            sessions = changed(sessions, changes[name])
        own = prices[prices["security"].isin(listed["security"])]
        panel, more = _panel(sessions, own, benchmarks, factors, factor_names)
        panels[name], calendars[name] = panel, sessions
        findings += more
    return panels, calendars, findings


def _panel(
    sessions: Sessions,
    prices: pd.DataFrame,
    benchmarks: pd.DataFrame,
    factors: pd.DataFrame | None,
    factor_names: tuple[str, ...],
) -> tuple[PricePanel, list[Finding]]:
    exchange, days = sessions.exchange, sessions.days
    last = prices["date"].max()
    if pd.notna(last):
        days = days[days <= np.datetime64(last, "D")]
    close, volume, securities, findings = _lay(exchange, days, prices)
    own = benchmarks[benchmarks["exchange"] == exchange]
    level = _align(days, own["date"], own["close"].to_numpy())
    findings += _benchmark_gaps(exchange, days, level)
    moves = {name: np.full(len(days), np.nan) for name in factor_names}
    if factors is not None:
        mine = factors[factors["exchange"] == exchange]
        moves = {name: _align(days, mine["date"], mine[name].to_numpy()) for name in factor_names}
    panel = PricePanel(
        exchange=exchange,
        sessions=days,
        securities=securities,
        close=close,
        volume=volume,
        returns=simple_returns(close),
        benchmark=simple_returns(level[:, None])[:, 0],
        factors=moves,
    )
    return panel, findings + _closed_sessions(panel)


def simple_returns(close: Floats) -> Floats:
    """(T, S) P_t / P_(t-1) - 1; NaN on the first session, in a gap and on the session after it."""
    returns = np.full_like(close, np.nan, order="F")
    returns[1:] = close[1:] / close[:-1] - 1
    return returns


def _lay(
    exchange: str, days: Dates, prices: pd.DataFrame
) -> tuple[Floats, Floats, tuple[str, ...], list[Finding]]:
    """Closes and volumes as columns; prices on no session are left out and reported."""
    codes, securities = pd.factorize(prices["security"], sort=True)
    dates = prices["date"].to_numpy().astype("datetime64[D]")
    row = np.searchsorted(days, dates)
    inside = row < len(days)
    inside[inside] = days[row[inside]] == dates[inside]
    close = np.full((len(days), len(securities)), np.nan, order="F")
    volume = np.full_like(close, np.nan, order="F")
    close[row[inside], codes[inside]] = prices["close"].to_numpy()[inside]
    volume[row[inside], codes[inside]] = prices["volume"].to_numpy()[inside]
    findings = []
    priced = prices["close"].notna().to_numpy()  # an empty cell on a holiday is no price
    off = dates[~inside & priced]
    if off.size:
        share = off.size / priced.sum()
        findings.append(
            Finding(
                "price_off_session",
                Severity.ERROR if share > OFF_SESSION_SHARE else Severity.WARNING,
                "prices",
                got=f"{off.size} prices ({share:.1%}) on dates without a session: {_dates(off)}",
                expected=f"dates on which {exchange} was open",
                remedy="Check the exchange of the listing; single dates are left out.",
                column="date",
            )
        )
    return close, volume, tuple(map(str, securities)), findings


def _align(days: Dates, dates: pd.Series, values: Floats) -> Floats:
    series = pd.Series(values, index=dates.to_numpy().astype("datetime64[D]"))
    return np.asarray(series.reindex(days).to_numpy(), dtype=np.float64)


def _benchmark_gaps(exchange: str, days: Dates, level: Floats) -> list[Finding]:
    """Gaps between the benchmark's first and last level; a shorter history costs deals later."""
    known = np.flatnonzero(np.isfinite(level))
    inside = slice(known[0], known[-1] + 1) if known.size else slice(None)
    missing = days[inside][np.isnan(level[inside])]
    if missing.size == 0:
        return []
    share = missing.size / days[inside].size
    return [
        Finding(
            "benchmark_gap",
            Severity.ERROR if share > OFF_SESSION_SHARE else Severity.WARNING,
            "benchmarks",
            got=f"{exchange}: no level on {missing.size} sessions ({share:.1%}): {_dates(missing)}",
            expected="a level on every session of the exchange",
            remedy="Complete the benchmark; returns of those sessions are not used.",
            column="close",
        )
    ]


def _closed_sessions(panel: PricePanel) -> list[Finding]:
    alive = _alive(panel.close)
    listed = alive.sum(axis=1)
    quoted = np.isfinite(panel.close).sum(axis=1)
    closed = panel.sessions[(listed >= 5) & (quoted < CLOSED_SHARE * listed)]
    if closed.size == 0:
        return []
    return [
        Finding(
            "session_without_prices",
            Severity.WARNING,
            "prices",
            got=f"{panel.exchange}: most securities have no price on {_dates(closed)}",
            expected="prices on every session of the calendar",
            remedy="Check with the exchange whether it was open.",
            column="date",
        )
    ]


def _alive(close: Floats) -> np.ndarray:
    """(T, S) whether the security has been quoted before or on the session and will be later."""
    quoted = np.isfinite(close)
    started = np.maximum.accumulate(quoted, axis=0)
    going = np.maximum.accumulate(quoted[::-1], axis=0)[::-1]
    return np.asarray(started & going)


def suspected_splits(panel: PricePanel) -> dict[str, list[np.datetime64]]:
    """Security -> sessions whose close moved by a whole factor while the benchmark was calm.

    A ratio to the benchmark's within 3% of 2, 3, 4, 5, 10, 20 or an inverse, benchmark below 5%:
    common practice, no source.
    """
    ratio = (1 + panel.returns) / (1 + panel.benchmark)[:, None]
    jumps = (np.abs(panel.returns) > 0.3) & (np.abs(panel.benchmark) < CALM_BENCHMARK)[:, None]
    found: dict[str, list[np.datetime64]] = {}
    for row, column in np.argwhere(jumps):
        near = np.abs(ratio[row, column] / SPLIT_FACTORS - 1) < SPLIT_TOLERANCE
        if near.any():
            found.setdefault(panel.securities[column], []).append(panel.sessions[row])
    return found


def _dates(days: Iterable[np.datetime64], shown: int = 4) -> str:
    listed = sorted(set(map(str, days)))
    more = f" and {len(listed) - shown} more" if len(listed) > shown else ""
    return ", ".join(listed[:shown]) + more
