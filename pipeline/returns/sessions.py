"""Trading sessions of an exchange, with their opening and closing instants."""

from __future__ import annotations

import re
from dataclasses import dataclass, field
from datetime import UTC, date, datetime, time
from functools import lru_cache
from typing import Any
from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd

from pipeline.core.findings import problem
from pipeline.core.prices import Dates

# The calendar library's own name where it keeps a hand-checked calendar of the exchange.
CALENDARS = {
    "XNYS": "NYSE",
    "XNAS": "NASDAQ",
    "XLON": "LSE",
    "XTKS": "JPX",
    "XHKG": "HKEX",
    "XSWX": "SIX",
    "XTSE": "TSX",
    "XASX": "ASX",
}
# Exchanges whose two calendars each miss closures that the other knows: one lacks the half days
# and three typhoons, the other two storms. A day counts if both have it, to the earlier close.
HELD_AGAINST = {"XHKG": "XHKG"}
MIC = re.compile(r"X[A-Z0-9]{3}|AIXK|BVMF|IEPA")


def _none() -> Dates:
    return np.empty(0, dtype="datetime64[D]")


@dataclass(frozen=True, slots=True, eq=False)
class Sessions:
    """The sessions of one exchange.

    Attributes:
        exchange: ISO 10383 code.
        days: (T,) ``datetime64[D]`` session dates, in the exchange's own zone.
        opens, closes: (T,) ``datetime64[s]`` UTC instants, early closes included.
        zone: IANA name of the exchange's zone.
        unplanned: ``datetime64[D]`` dates closed once, outside the yearly rules: storms, outages,
            days of mourning, jubilees, and closures that the study names.
    """

    exchange: str
    days: Dates
    opens: Dates
    closes: Dates
    zone: str
    unplanned: Dates = field(default_factory=_none)


def known_exchanges() -> frozenset[str]:
    """The ISO 10383 codes for which a calendar is known."""
    import pandas_market_calendars as calendars

    names = calendars.get_calendar_names()
    return frozenset(CALENDARS) | {name for name in names if MIC.fullmatch(name)}


@dataclass(frozen=True, slots=True)
class CalendarChange:
    """What the desk knows better than the calendar of one exchange.

    Attributes:
        closed: dates without a session.
        closes: date -> local closing time of a session, which may be one the calendar lacks.
    """

    closed: tuple[date, ...] = ()
    closes: tuple[tuple[date, time], ...] = ()


def changed(sessions: Sessions, change: CalendarChange) -> Sessions:
    """The sessions with dates taken out, closing times moved and sessions added."""
    away = np.array([str(day) for day in change.closed], dtype="datetime64[D]")
    keep = ~np.isin(sessions.days, away)
    days, opens, closes = sessions.days[keep], sessions.opens[keep], sessions.closes[keep]
    for day, clock in change.closes:
        instant = _instant(day, clock, sessions.zone)
        at = int(np.searchsorted(days, np.datetime64(day, "D")))
        if at < len(days) and days[at] == np.datetime64(day, "D"):
            closes = closes.copy()
            closes[at] = instant
            continue
        days = np.insert(days, at, np.datetime64(day, "D"))
        # Nothing depends on the opening of an added session but that it comes before the close.
        opens = np.insert(opens, at, instant - np.timedelta64(1, "h"))
        closes = np.insert(closes, at, instant)
    unplanned = np.setdiff1d(np.union1d(sessions.unplanned, away), days)
    return Sessions(sessions.exchange, days, opens, closes, sessions.zone, unplanned)


def _instant(day: date, clock: time, zone: str) -> np.datetime64:
    local = datetime.combine(day, clock, tzinfo=ZoneInfo(zone))
    return np.datetime64(local.astimezone(UTC).replace(tzinfo=None), "s")


@lru_cache(maxsize=32)
def sessions_between(exchange: str, first: str, last: str) -> Sessions:
    """Sessions of ``exchange`` from ``first`` to ``last`` (ISO dates, inclusive).

    Raises:
        InputProblem: if no calendar of that code is known.
    """
    import pandas_market_calendars as calendars

    name = CALENDARS.get(exchange, exchange)
    try:
        calendar = calendars.get_calendar(name)
    except RuntimeError:
        raise problem(
            "unknown_exchange",
            "deals",
            column="exchange",
            got=f"'{exchange}'",
            expected="an ISO 10383 code with a known calendar, such as " + ", ".join(CALENDARS),
            remedy="Use the code of the listing's exchange.",
        ) from None
    schedule = calendar.schedule(start_date=first, end_date=last)
    once = _closed_once(calendar, first, last)
    if exchange in HELD_AGAINST:
        second = calendars.get_calendar(HELD_AGAINST[exchange])
        taken = schedule.index.to_numpy().astype("datetime64[D]")
        missed = np.intersect1d(_closed_once(second, first, last), taken)
        schedule = _both(schedule, second.schedule(start_date=first, end_date=last))
        once = np.union1d(once, missed)
    return Sessions(
        exchange=exchange,
        days=schedule.index.to_numpy().astype("datetime64[D]"),
        opens=_utc(schedule["market_open"]),
        closes=_utc(schedule["market_close"]),
        zone=str(calendar.tz),
        unplanned=once,
    )


def _both(schedule: pd.DataFrame, other: pd.DataFrame) -> pd.DataFrame:
    """The sessions that two calendars have in common, each to the earlier of its two closes."""
    common = schedule.index.intersection(other.index)
    closes = pd.concat([schedule["market_close"], other["market_close"]], axis=1).loc[common]
    return schedule.loc[common].assign(market_close=closes.min(axis=1))


def _closed_once(calendar: Any, first: str, last: str) -> Dates:
    """Closures of single dates that the calendar lists; not every calendar keeps such a list."""
    known = pd.DatetimeIndex(
        [pd.Timestamp(day).tz_localize(None) for day in calendar.adhoc_holidays]
    )
    days = known.to_numpy().astype("datetime64[D]")
    return np.unique(days[(days >= np.datetime64(first)) & (days <= np.datetime64(last))])


def _utc(instants: pd.Series) -> Dates:
    naive = instants.dt.tz_convert("UTC").dt.tz_localize(None)
    return np.asarray(naive.to_numpy().astype("datetime64[s]"))
