"""Which session could first react to an announcement."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

import numpy as np
import pandas as pd

from pipeline.core.ledger import Action, LedgerEntry
from pipeline.core.prices import Dates, Integers
from pipeline.returns.sessions import Sessions


class Timing(StrEnum):
    """How an announcement lies to the sessions."""

    DURING = "before the close"
    AFTER_CLOSE = "after the close"
    CLOSED_DAY = "on a day without trading"
    DATE_ONLY = "date only"
    DATE_ONLY_CLOSED = "date only, on a day without trading"


WORDS = {
    Timing.DURING: "public before the close of {day}, so that close holds the reaction",
    Timing.AFTER_CLOSE: "public after the close of the session before, so {day} reacts first",
    Timing.CLOSED_DAY: "public while the exchange was closed, so {day} reacts first",
    Timing.DATE_ONLY: "only the date is known; {day} is taken, the session after may react too",
    Timing.DATE_ONLY_CLOSED: "only the date is known and it is no session; {day} reacts first",
}
MOVED = {Timing.AFTER_CLOSE, Timing.CLOSED_DAY, Timing.DATE_ONLY_CLOSED}


@dataclass(frozen=True, slots=True, eq=False)
class DayZero:
    """Day zero of N announcements on one exchange.

    Attributes:
        position: (N,) index into the sessions; T when the sessions end before it.
        timing: N reasons.
    """

    position: Integers
    timing: tuple[Timing, ...]


def place(instants: Dates, dates: Dates, sessions: Sessions, cutoff_minutes: int = 0) -> DayZero:
    """Place announcements on sessions (methods: the close of a session holds news before it).

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
    local = _local_dates(instants, dates, known, sessions.zone)
    day_of = np.append(sessions.days, np.datetime64("NaT"))[position]
    is_session = np.isin(local, sessions.days)
    timing = tuple(
        _reason(bool(k), bool(s), bool(same))
        for k, s, same in zip(known, is_session, local == day_of, strict=True)
    )
    return DayZero(position, timing)


def _local_dates(instants: Dates, dates: Dates, known: np.ndarray, zone: str) -> Dates:
    stamps = pd.DatetimeIndex(instants.astype("datetime64[ns]")).tz_localize("UTC").tz_convert(zone)
    local = stamps.tz_localize(None).to_numpy().astype("datetime64[D]")
    return np.where(known, local, dates)


def _reason(time_known: bool, is_session: bool, same_day: bool) -> Timing:
    if not time_known:
        return Timing.DATE_ONLY if is_session else Timing.DATE_ONLY_CLOSED
    if same_day:
        return Timing.DURING
    return Timing.AFTER_CLOSE if is_session else Timing.CLOSED_DAY


def sentence(timing: Timing, day: np.datetime64) -> str:
    """Why ``day`` is day zero, in one sentence."""
    return WORDS[timing].format(day=day)


def ledger_entry(deal: str, timing: Timing, day: np.datetime64) -> LedgerEntry | None:
    """The note that an announcement was moved, or that its time is unknown; None otherwise."""
    if timing in MOVED:
        return LedgerEntry(
            deal, "moved_to_session", Action.CHANGED, f"{timing}; day zero {day}", "next session"
        )
    if timing is Timing.DATE_ONLY:
        return LedgerEntry(deal, "time_unknown", Action.FLAGGED, f"day zero {day}", "a time of day")
    return None
