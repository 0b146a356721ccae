"""Price panels: long tables laid on each exchange's sessions, and cross-checks of the two."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd

from pipeline.core.findings import Finding, Severity
from pipeline.core.prices import Booleans, Dates, Floats, PricePanel
from pipeline.returns.currency import Quotation, Rates, session_rates
from pipeline.returns.jumps import dates, jumps_together, unit_jumps
from pipeline.returns.limits import DEFAULT_LIMITS, ScreenLimits
from pipeline.returns.policies import alive
from pipeline.returns.sessions import CalendarChange, Sessions, changed, sessions_between

RETURN = "return"
FROM_TO = ("first", "last")


@dataclass(frozen=True, slots=True)
class InOneCurrency:
    """The rates into the common currency, and what each price and benchmark is quoted in."""

    rates: Rates
    quoted: Quotation


def build_panels(
    listings: pd.DataFrame,
    prices: pd.DataFrame,
    benchmarks: pd.DataFrame,
    factors: pd.DataFrame | None,
    factor_names: tuple[str, ...],
    changes: Mapping[str, CalendarChange] | None = None,
    limits: ScreenLimits = DEFAULT_LIMITS,
    money: InOneCurrency | None = None,
    spans: pd.DataFrame | None = None,
) -> tuple[dict[str, PricePanel], dict[str, Sessions], list[Finding]]:
    """One panel an exchange, with findings about prices, benchmark and calendar.

    Args:
        listings: security, exchange: one row a security.
        prices: security, date, close or return (simple, decimal), volume.
        benchmarks: exchange, date, close or return.
        factors: exchange, date, one column a factor; or None.
        factor_names: the factor columns to keep.
        changes: exchange -> what the desk knows better than its calendar.
        limits: when the tables are doubted.
        money: makes all prices and benchmarks ones of a common currency; None leaves them.
        spans: ``security, first, last``: the dates of which prices were read; None for all.
    """
    panels: dict[str, PricePanel] = {}
    calendars: dict[str, Sessions] = {}
    findings: list[Finding] = []
    first, last = prices["date"].min(), prices["date"].max()
    # The first of given returns began on the session before it.
    margin = pd.Timedelta(days=14 if RETURN in prices else 0)
    for exchange, listed in listings.groupby("exchange", sort=True):
        name = str(exchange)
        # A margin of days lets an announcement after the last price still be placed.
        sessions = sessions_between(
            name, f"{first - margin:%Y-%m-%d}", f"{last + pd.Timedelta(days=10):%Y-%m-%d}"
        )
        if margin:
            sessions = _from_the_one_before(sessions, np.datetime64(first, "D"))
        if changes and name in changes:
            sessions = changed(sessions, changes[name])
        here = prices["security"].isin(listed["security"]).to_numpy()
        own = prices if here.all() else prices[here]
        level = benchmarks[benchmarks["exchange"] == exchange]
        moves = None if factors is None else factors[factors["exchange"] == exchange]
        panel, more = _panel(sessions, own, level, limits, money, spans)
        panels[name] = _with_factors(panel, moves, factor_names)
        calendars[name] = sessions
        findings += more
    return panels, calendars, findings


def _from_the_one_before(sessions: Sessions, first: np.datetime64) -> Sessions:
    """The sessions from the last one before a date on."""
    kept = slice(max(int(np.searchsorted(sessions.days, first)) - 1, 0), None)
    return replace(
        sessions,
        days=sessions.days[kept],
        opens=sessions.opens[kept],
        closes=sessions.closes[kept],
    )


def _panel(
    sessions: Sessions,
    prices: pd.DataFrame,
    benchmarks: pd.DataFrame,
    limits: ScreenLimits,
    money: InOneCurrency | None,
    spans: pd.DataFrame | None,
) -> tuple[PricePanel, list[Finding]]:
    exchange, days = sessions.exchange, sessions.days
    last = prices["date"].max()
    if pd.notna(last):
        days = days[days <= np.datetime64(last, "D")]
    value = RETURN if RETURN in prices else "close"
    values, volume, securities, findings = _lay(exchange, days, prices, value, limits)
    known = RETURN if RETURN in benchmarks else "close"
    level = _align(days, benchmarks["date"], benchmarks[known].to_numpy())
    findings += _benchmark_gaps(exchange, days, level, limits)
    market = level[:, None]
    rate, market_rate = None, None
    if money is not None:
        quoted_in = [money.quoted.securities[code] for code in securities]
        rate, lost = session_rates(days, quoted_in, money.rates, np.isfinite(values), "prices")
        own = [money.quoted.benchmarks.get(exchange, money.rates.common)]
        market_rate, more = session_rates(
            days, own, money.rates, np.isfinite(market), "the benchmark"
        )
        findings += lost + more
    close, returns = _close_and_return(values, value == RETURN, rate)
    panel = PricePanel(
        exchange=exchange,
        sessions=days,
        securities=securities,
        close=close,
        volume=volume,
        returns=returns,
        benchmark=_close_and_return(market, known == RETURN, market_rate)[1][:, 0],
        factors={},
        asked=None if spans is None else _asked(days, securities, spans),
    )
    checks = (_closed_sessions, _sparse, unit_jumps, jumps_together)
    return panel, findings + [found for check in checks for found in check(panel, limits)]


def _asked(days: Dates, securities: tuple[str, ...], spans: pd.DataFrame) -> Booleans:
    """(T, S) whether the price of the session was read."""
    column = pd.Index(securities).get_indexer(pd.Index(spans["security"]))
    known = column >= 0
    first, last = (spans.loc[known, end].to_numpy().astype("datetime64[D]") for end in FROM_TO)
    edges = np.zeros((len(days) + 1, len(securities)), dtype=np.int16)
    np.add.at(edges, (np.searchsorted(days, first), column[known]), 1)
    np.add.at(edges, (np.searchsorted(days, last, side="right"), column[known]), -1)
    return np.cumsum(edges[:-1], axis=0, dtype=np.int32) > 0


def _with_factors(
    panel: PricePanel, factors: pd.DataFrame | None, names: tuple[str, ...]
) -> PricePanel:
    if factors is None:
        held = {name: np.full(len(panel.sessions), np.nan) for name in names}
    else:
        on = factors["date"]
        held = {name: _align(panel.sessions, on, factors[name].to_numpy()) for name in names}
    return replace(panel, factors=held)


def _close_and_return(
    values: Floats, are_returns: bool, rate: Floats | None
) -> tuple[Floats, Floats]:
    """(T, S) closes and simple returns from either; ``rate`` is the value of one unit of money.

    Closes made of returns are an index of 100 on the session before the first one.
    """
    if not are_returns:
        close = values if rate is None else values * rate
        return close, simple_returns(close)
    if rate is not None:
        values = (1 + values) * (1 + simple_returns(rate)) - 1
    known = np.isfinite(values)
    close = np.where(known, 100 * np.cumprod(1 + np.where(known, values, 0.0), axis=0), np.nan)
    first = np.argmax(known, axis=0)
    starts = np.flatnonzero(known.any(axis=0) & (first > 0))
    close[first[starts] - 1, starts] = 100.0
    return np.asfortranarray(close), np.asfortranarray(values)


def simple_returns(close: Floats) -> Floats:
    """(T, S) P_t / P_(t-1) - 1; NaN on the first session, in a gap and on the session after it."""
    returns = np.full_like(close, np.nan, order="F")
    np.divide(close[1:], close[:-1], out=returns[1:])
    returns[1:] -= 1
    return returns


def _lay(
    exchange: str, days: Dates, prices: pd.DataFrame, value: str, limits: ScreenLimits
) -> tuple[Floats, Floats, tuple[str, ...], list[Finding]]:
    """Values and volumes as columns; those on no session are left out and reported."""
    codes, securities = pd.factorize(prices["security"], sort=True)
    on = prices["date"].to_numpy().astype("datetime64[D]")
    row = np.searchsorted(days, on)
    inside = row < len(days)
    inside[inside] = days[row[inside]] == on[inside]
    laid = np.full((len(days), len(securities)), np.nan, order="F")
    volume = np.broadcast_to(np.nan, laid.shape)  # takes no memory where no volume is known
    if not inside.all():
        row, codes = row[inside], codes[inside]
    laid[row, codes] = _inside(prices[value], inside)
    if prices["volume"].notna().any():
        volume = np.full_like(laid, np.nan, order="F")
        volume[row, codes] = _inside(prices["volume"], inside)
    findings = []
    priced = prices[value].notna().to_numpy()  # an empty cell on a holiday is no price
    off = on[~inside & priced]
    if off.size:
        share = off.size / priced.sum()
        findings.append(
            Finding(
                "price_off_session",
                Severity.ERROR if share > limits.off_session_share else Severity.WARNING,
                "prices",
                got=f"{off.size} prices ({share:.1%}) on dates without a session: {dates(off)}",
                expected=f"dates on which {exchange} was open",
                remedy="Check the exchange of the listing; single dates are left out.",
                column="date",
            )
        )
    return laid, volume, tuple(map(str, securities)), findings


def _inside(column: pd.Series, inside: Booleans) -> Floats:
    """The cells at ``inside``; the column's own memory if those are all."""
    values = column.to_numpy()
    return values if inside.all() else values[inside]


def _align(days: Dates, on: pd.Series, values: Floats) -> Floats:
    series = pd.Series(values, index=on.to_numpy().astype("datetime64[D]"))
    return np.asarray(series.reindex(days).to_numpy(), dtype=np.float64)


def _benchmark_gaps(
    exchange: str, days: Dates, level: Floats, limits: ScreenLimits
) -> list[Finding]:
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
            Severity.ERROR if share > limits.benchmark_gaps else Severity.WARNING,
            "benchmarks",
            got=f"{exchange}: no level on {missing.size} sessions ({share:.1%}): {dates(missing)}",
            expected="a level on every session of the exchange",
            remedy="Complete the benchmark; returns of those sessions are not used.",
            column="close",
        )
    ]


def _closed_sessions(panel: PricePanel, limits: ScreenLimits) -> list[Finding]:
    listed = alive(panel).sum(axis=1)
    quoted = np.isfinite(panel.close).sum(axis=1)
    closed = panel.sessions[(listed >= 5) & (quoted < limits.closed_share * listed)]
    if closed.size == 0:
        return []
    return [
        Finding(
            "session_without_prices",
            Severity.WARNING,
            "prices",
            got=f"{panel.exchange}: most securities have no price on {dates(closed)}",
            expected="prices on every session of the calendar",
            remedy="Check with the exchange whether it was open.",
            column="date",
        )
    ]


def _sparse(panel: PricePanel, limits: ScreenLimits) -> list[Finding]:
    """An error if half of the securities go a week between two prices: a weekly or monthly file."""
    quoted = np.isfinite(panel.close)
    with np.errstate(invalid="ignore", divide="ignore"):
        apart = (alive(panel).sum(axis=0) - 1) / (quoted.sum(axis=0) - 1)
    several = quoted.sum(axis=0) > 2
    if not several.any() or np.mean(apart[several] >= limits.sparse_sessions) <= 0.5:
        return []
    return [
        Finding(
            "not_daily",
            Severity.ERROR,
            "prices",
            got=f"{panel.exchange}: {np.median(apart[several]):.1f} sessions from one price to the "
            "next, in the middle security",
            expected="a price a session",
            remedy="Export daily prices; weekly or monthly ones cannot place a reaction.",
            column="date",
        )
    ]
