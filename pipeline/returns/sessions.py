"""Trading sessions of an exchange, with their opening and closing instants."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

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


@dataclass(frozen=True, slots=True, eq=False)
class Sessions:
    """The sessions of one exchange.

    Attributes:
        exchange: ISO 10383 code.
        days: (T,) ``datetime64[D]`` session dates, in the exchange's own zone.
        opens, closes: (T,) ``datetime64[s]`` UTC instants, early closes included.
        zone: IANA name of the exchange's zone.
    """

    exchange: str
    days: Dates
    opens: Dates
    closes: Dates
    zone: str


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
    return Sessions(
        exchange=exchange,
        days=schedule.index.to_numpy().astype("datetime64[D]"),
        opens=_utc(schedule["market_open"]),
        closes=_utc(schedule["market_close"]),
        zone=str(calendar.tz),
    )


def _utc(instants: pd.Series) -> Dates:
    naive = instants.dt.tz_convert("UTC").dt.tz_localize(None)
    return np.asarray(naive.to_numpy().astype("datetime64[s]"))
