"""Which session could first react to an announcement, and why, in words."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

import numpy as np
import pandas as pd

from pipeline.core.findings import Finding, Severity
from pipeline.core.ledger import Action, LedgerEntry
from pipeline.core.prices import Booleans, Dates, Integers
from pipeline.core.window import Window
from pipeline.returns.sessions import Sessions


class Timing(StrEnum):
    """How an announcement lies to the sessions."""

    BEFORE_OPEN = "before the open"
    DURING = "during the session"
    CUT_OFF = "too near the close"
    AFTER_CLOSE = "after the close"
    CLOSED_DAY = "on a day without trading"
    CLOSED_ONCE = "on a day closed out of turn"
    DATE_ONLY = "date only"
    DATE_ONLY_CLOSED = "date only, on a day without trading"


# Blanks: the stamp, the exchange, its open and close on the stamp's date, the cut-off in minutes.
WORDS = {
    Timing.BEFORE_OPEN: "Public {stamp}, before {exchange} opened at {opened}",
    Timing.DURING: "Public {stamp}, while {exchange} was open",
    Timing.CUT_OFF: "Public {stamp}, less than {cutoff} minutes before {exchange} closed at "
    "{closed}, so that close may not hold it whole",
    Timing.AFTER_CLOSE: "Public {stamp}, after {exchange} had closed at {closed}",
    Timing.CLOSED_DAY: "Public {stamp}, a weekend or holiday of {exchange}",
    Timing.CLOSED_ONCE: "Public {stamp}, a day on which {exchange} stayed closed out of turn",
    Timing.DATE_ONLY: "Public {stamp} at an unknown time",
    Timing.DATE_ONLY_CLOSED: "Public {stamp} at an unknown time, a day without trading on "
    "{exchange}",
}
FIRST = "; the close of {day} at {close} is the first to hold it"
EITHER = "; the close of {day} at {close} may hold it, or the close of the session after"
BEYOND = "; the sessions known end before one that could react"
SHOWN = 5
MOVED = {Timing.CUT_OFF, Timing.AFTER_CLOSE, Timing.CLOSED_DAY, Timing.CLOSED_ONCE,
         Timing.DATE_ONLY_CLOSED}  # fmt: skip


@dataclass(frozen=True, slots=True, eq=False)
class DayZero:
    """Day zero of N announcements on one exchange.

    Attributes:
        position: (N,) index into the sessions; T when the sessions end before it.
        timing: N reasons.
        stamps: N announcements on the exchange's clock, or dates alone.
        closes: N closing times of day zero on that clock; '' when the sessions end before it.
        reasons: N sentences without their full stop.
    """

    position: Integers
    timing: tuple[Timing, ...]
    stamps: tuple[str, ...]
    closes: tuple[str, ...]
    reasons: tuple[str, ...]


def place(instants: Dates, dates: Dates, sessions: Sessions, cutoff_minutes: int = 0) -> DayZero:
    """Place announcements on sessions: the close of a session holds the news before it.

    Common practice, no source.

    Args:
        instants: (N,) ``datetime64[s]`` UTC; NaT where only a date is known.
        dates: (N,) ``datetime64[D]`` dates as written.
        sessions: the listing's exchange.
        cutoff_minutes: news this close to the close counts for the next session.

    Returns:
        The first session whose close, less the cutoff, is at or after the instant; for a date
        alone, that date's session or the next one. News before the open, or in a lunch break,
        belongs to the same session.
    """
    limits = sessions.closes - np.timedelta64(cutoff_minutes, "m")
    known = ~np.isnat(instants)
    position = np.where(
        known,
        np.searchsorted(limits, np.where(known, instants, limits[:1]), side="left"),
        np.searchsorted(sessions.days, dates, side="left"),
    ).astype(np.int64)
    clock = _local(instants, sessions.zone)
    local = np.where(known, clock.astype("datetime64[D]"), dates)
    timing = _timings(instants, known, local, position, sessions)
    stamps = _stamps(clock, known, local)
    closes = [*_clock_times(sessions.closes, sessions.zone), ""]
    own = tuple(closes[at] for at in position)
    reasons = _reasons(timing, stamps, local, position, sessions, closes, cutoff_minutes)
    return DayZero(position, timing, stamps, own, reasons)


def _local(instants: Dates, zone: str) -> Dates:
    """UTC instants as wall-clock times of a zone."""
    stamps = pd.DatetimeIndex(instants.astype("datetime64[s]")).tz_localize("UTC").tz_convert(zone)
    return np.asarray(stamps.tz_localize(None).to_numpy().astype("datetime64[s]"))


def _clock_times(instants: Dates, zone: str) -> list[str]:
    return [text[11:16] for text in np.datetime_as_string(_local(instants, zone), unit="m")]


def _stamps(clock: Dates, known: Booleans, local: Dates) -> tuple[str, ...]:
    minutes = np.datetime_as_string(clock, unit="m")
    days = np.datetime_as_string(local, unit="D")
    return tuple(
        minute.replace("T", " ") if k else str(day)
        for minute, day, k in zip(minutes, days, known, strict=True)
    )


def _timings(
    instants: Dates, known: Booleans, local: Dates, position: Integers, sessions: Sessions
) -> tuple[Timing, ...]:
    at = np.minimum(np.searchsorted(sessions.days, local), len(sessions.days) - 1)
    is_session = sessions.days[at] == local
    same = np.append(sessions.days, np.datetime64("NaT"))[position] == local
    early = instants < sessions.opens[at]
    late = instants > sessions.closes[at]
    once = np.isin(local, sessions.unplanned)
    return tuple(
        _reason(*map(bool, facts))
        for facts in zip(known, is_session, same, early, late, once, strict=True)
    )


def _reason(
    time_known: bool, is_session: bool, same_day: bool, early: bool, late: bool, once: bool
) -> Timing:
    if not time_known:
        return Timing.DATE_ONLY if is_session else Timing.DATE_ONLY_CLOSED
    if not is_session:
        return Timing.CLOSED_ONCE if once else Timing.CLOSED_DAY
    if same_day:
        return Timing.BEFORE_OPEN if early else Timing.DURING
    return Timing.AFTER_CLOSE if late else Timing.CUT_OFF


def _reasons(
    timing: tuple[Timing, ...],
    stamps: tuple[str, ...],
    local: Dates,
    position: Integers,
    sessions: Sessions,
    closes: list[str],
    cutoff_minutes: int,
) -> tuple[str, ...]:
    """Why each day zero is day zero."""
    opens = _clock_times(sessions.opens, sessions.zone)
    days = [*map(str, sessions.days), ""]
    at = np.minimum(np.searchsorted(sessions.days, local), len(sessions.days) - 1)
    found = []
    for kind, stamp, own, zero in zip(timing, stamps, at, position, strict=True):
        dated = kind in (Timing.DATE_ONLY, Timing.DATE_ONLY_CLOSED)
        end = EITHER if kind is Timing.DATE_ONLY else FIRST if closes[zero] else BEYOND
        sentence = WORDS[kind] + end
        found.append(
            sentence.format(
                stamp=f"on {stamp}" if dated else f"{stamp} ({sessions.zone})",
                exchange=sessions.exchange,
                opened=opens[own],
                closed=closes[own],
                cutoff=cutoff_minutes,
                day=days[zero],
                close=closes[zero],
            )
        )
    return tuple(found)


def ledger_entry(deal: str, timing: Timing, day: np.datetime64) -> LedgerEntry | None:
    """The note that an announcement was moved, or that its time is unknown; None otherwise."""
    if timing in MOVED:
        return LedgerEntry(
            deal, "moved_to_session", Action.CHANGED, f"{timing}; day zero {day}", "next session"
        )
    if timing is Timing.DATE_ONLY:
        return LedgerEntry(deal, "time_unknown", Action.FLAGGED, f"day zero {day}", "a time of day")
    return None


def times_needed(deals: pd.DataFrame, headline: Window, file: str) -> list[Finding]:
    """An error if deals with a date and no time meet a headline window that ends on day zero.

    The session after may hold their whole reaction. A date without trading is no such case: the
    session after it is day zero, and holds the news.

    Args:
        deals: deal_id, and timing as placed.
        headline: the window declared before looking.
        file: the name of the deal list.
    """
    unknown = deals.loc[deals["timing"] == Timing.DATE_ONLY, "deal_id"].astype(str).tolist()
    if not unknown or not headline.start <= 0 == headline.end:
        return []
    more = f" and {len(unknown) - SHOWN} more" if len(unknown) > SHOWN else ""
    return [
        Finding(
            "time_needed",
            Severity.ERROR,
            file,
            got=f"{len(unknown)} deals with a date and no time ({', '.join(unknown[:SHOWN])}{more})"
            f", and the headline window {headline.label}",
            expected="the time of each announcement, or a headline window that holds the session "
            "after day zero",
            remedy=f"Set event_time.headline to [{headline.start}, 1], add the times, or leave "
            "those deals out.",
            column="announced_at",
        )
    ]
