"""Dates of runs of sessions, one run an event, laid out when they are asked for."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from pipeline.core.prices import Dates, Integers


@dataclass(frozen=True, slots=True, eq=False)
class SessionRuns:
    """N runs of ``length`` sessions, each on the calendar of its exchange.

    Most uses of an event never look at the dates of its estimation window, which as a table
    would take as much memory as its returns.

    Attributes:
        calendars: the sessions of each exchange, ``datetime64[D]`` in order.
        calendar: (N,) which of them.
        first: (N,) place of the run's first session; it may lie before the calendar's start.
        length: sessions a run.
    """

    calendars: tuple[Dates, ...]
    calendar: Integers
    first: Integers
    length: int

    def __getitem__(self, rows: Integers | slice) -> SessionRuns:
        return SessionRuns(self.calendars, self.calendar[rows], self.first[rows], self.length)

    def dates(self) -> Dates:
        """(N, length) dates; NaT beyond a calendar's ends."""
        out = np.full((len(self.first), self.length), np.datetime64("NaT"), dtype="datetime64[D]")
        for at, sessions in enumerate(self.calendars):
            rows = np.flatnonzero(self.calendar == at)
            run = self.first[rows, None] + np.arange(self.length)
            exists = (run >= 0) & (run < len(sessions))
            days = sessions[np.clip(run, 0, len(sessions) - 1)]
            out[rows] = np.where(exists, days, np.datetime64("NaT"))
        return out
