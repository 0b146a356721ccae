"""Which prices the events of a study touch: securities, and the dates around each event."""

from __future__ import annotations

from dataclasses import dataclass

import pandas as pd

from pipeline.inputs.source import DAYS, Only, only

# Sessions to calendar days: no exchange of the calendars has fewer than 235 sessions a year, and
# the margin covers its longest run of holidays.
A_SESSION = 365 / 235
MARGIN = 20
DATES = ("announced_date", "rumoured_date")


@dataclass(frozen=True, slots=True)
class Reach:
    """How far from an event a study looks.

    Attributes:
        before, after: sessions around a deal's announcement.
        candidate_before: sessions before the date of a candidate's values; None if no price of a
            candidate is used.
        whole: why every date is read; '' if only those sessions are.
    """

    before: int = 0
    after: int = 0
    candidate_before: int | None = None
    whole: str = "not said"


EVERYTHING = Reach()


def touched(
    reach: Reach,
    deals: pd.DataFrame | None,
    candidates: pd.DataFrame | None,
    peers: pd.DataFrame | None,
    lines: pd.DataFrame | None,
) -> Only | None:
    """The rows of the price table that are needed; None if no security is named.

    A company with several listings is looked for under the code of each.
    """
    tables = (deals, candidates, peers, lines)
    columns = ("security", "peer", "line")
    present = [table for table in tables if table is not None]
    named = {code for table in present for name in columns if name in table for code in table[name]}
    named.discard("")
    if not named:
        return None
    if reach.whole or deals is None:
        return only(named)
    spans = [_around(deals, name, reach.before, reach.after) for name in DATES if name in deals]
    if candidates is not None and reach.candidate_before is not None:
        spans.append(_around(candidates, "as_of", reach.candidate_before, 0))
    found = pd.concat(spans, ignore_index=True)
    if found.empty:  # no date could be read, which is said where it stands and not of the prices
        return only(named)
    if lines is not None:
        found = pd.concat([found, _of_lines(found, lines)], ignore_index=True)
    return only(named, found)


def _around(table: pd.DataFrame, date: str, before: int, after: int) -> pd.DataFrame:
    rows = table[table[date].notna() & (table["security"] != "")]
    day = rows[date].dt.tz_localize(None).dt.normalize().astype("datetime64[s]")
    return pd.DataFrame(
        {"security": rows["security"], "first": day - _days(before), "last": day + _days(after)}
    )


def _days(sessions: int) -> pd.Timedelta:
    return pd.Timedelta(days=min(int(sessions * A_SESSION) + MARGIN, DAYS // 16))


def _of_lines(spans: pd.DataFrame, lines: pd.DataFrame) -> pd.DataFrame:
    """The spans of companies under the codes of their listings."""
    pairs = lines[["security", "line"]].drop_duplicates()
    each = spans.merge(pairs, on="security")
    return each.assign(security=each["line"])[["security", "first", "last"]]
