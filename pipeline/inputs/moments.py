"""When an announcement became public: from a cell to an instant, or to a date alone."""

from __future__ import annotations

import re
from dataclasses import dataclass
from datetime import UTC, date, datetime
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

import pandas as pd

from pipeline.core.findings import Finding, Severity
from pipeline.inputs.contracts import (
    DAY,
    EARLIEST,
    EXAMPLES,
    FILL_VALUES,
    date_part,
    is_missing,
    row_numbers,
)
from pipeline.inputs.date_formats import Cell, date_findings, serial_day, serial_doubt
from pipeline.inputs.files import ROW, Source

ISO_DATE = re.compile(r"^\d{4}-\d{2}-\d{2}$")
MIDNIGHT = "T00:00:00+00:00"


@dataclass(frozen=True, slots=True)
class Refusal:
    """Why a cell gives no instant."""

    rule: str
    expected: str
    remedy: str


BAD_FORMAT = Refusal(
    "unparseable_date",
    "YYYY-MM-DD HH:MM, with an offset or a zone in timestamp_zone, or a date YYYY-MM-DD",
    "Correct the cell, or declare your format in inputs.date_format.",
)
NO_ZONE = Refusal(
    "missing_zone",
    "an offset (+01:00) or a zone for every time of day",
    "Fill timestamp_zone (for example Europe/London), or set inputs.timestamp_zone.",
)
BAD_ZONE = Refusal(
    "missing_zone", "the name of a time zone, such as America/New_York", "Correct timestamp_zone."
)
IMPOSSIBLE = Refusal(
    "impossible_local_time",
    "a local time that exists once; the clocks changed that night",
    "Write the time with its offset, for example 2021-11-07T01:30:00-05:00.",
)
OUT_OF_RANGE = Refusal(
    "date_out_of_range",
    f"a date from {EARLIEST:%Y-%m-%d} to today",
    "Correct the date; a deal not yet announced has no reaction.",
)


def read_moment(cell: object, zone: str, date_format: str = "") -> datetime | date | Refusal:
    """The instant of an announcement, its date if no time was given, or a refusal.

    A local time that the change of clocks skipped, or made twice, is refused unless it carries
    its offset. Midnight without an offset counts as a date alone. The instant keeps the zone it
    was written in.

    Args:
        cell: as read from the file.
        zone: IANA name for times without an offset; '' if none is known.
        date_format: the format declared in the study, with or without its time of day, or that of
            a spreadsheet's serial days; it is tried before ISO 8601.
    """
    moment = _parse(cell, date_format)
    if isinstance(moment, Refusal):
        return moment
    # A day of grace: it may already be tomorrow where the deal was announced.
    tomorrow = pd.Timestamp.now() + pd.Timedelta(days=1)
    written = pd.Timestamp(moment.replace(tzinfo=None))
    if not EARLIEST <= written <= tomorrow or written.normalize() in FILL_VALUES:
        return OUT_OF_RANGE
    text = str(cell).strip()
    bare = ISO_DATE.match(text) or (
        moment.tzinfo is None and (moment.hour, moment.minute, moment.second) == (0, 0, 0)
    )
    if bare:
        return moment.date()
    if moment.tzinfo is not None:
        return moment
    if not zone:
        return NO_ZONE
    return _localise(moment, zone)


def _parse(cell: object, date_format: str) -> datetime | Refusal:
    if isinstance(cell, pd.Timestamp):
        return cell.to_pydatetime()
    if isinstance(cell, datetime):
        return cell
    if isinstance(cell, date):
        return datetime(cell.year, cell.month, cell.day)
    counted = serial_day(cell, date_format)
    if counted is not None:
        return counted
    text = str(cell).strip()
    for declared in (date_format, date_part(date_format)):
        try:
            if declared:
                return datetime.strptime(text, declared)
        except ValueError:
            continue
    if not re.match(r"^\d{4}-\d{2}-\d{2}([T ]\d{2}:\d{2}|$)", text):
        return BAD_FORMAT
    try:
        return datetime.fromisoformat(text)
    except ValueError:
        return BAD_FORMAT


def _localise(moment: datetime, zone: str) -> datetime | Refusal:
    try:
        clock = ZoneInfo(zone)
    except (ZoneInfoNotFoundError, ValueError):
        return BAD_ZONE
    first = moment.replace(tzinfo=clock, fold=0)
    second = moment.replace(tzinfo=clock, fold=1)
    exists = first.astimezone(UTC).astimezone(clock).replace(tzinfo=None) == moment
    if not exists or first.utcoffset() != second.utcoffset():
        return IMPOSSIBLE
    return first


def read_moments(
    deals: pd.DataFrame,
    source: Source,
    default_zone: str,
    date_format: str,
    column: str = "announced_at",
) -> tuple[pd.DataFrame, list[Finding]]:
    """The deals with ``announced_utc`` (NaT when only a date is known) and ``announced_date``.

    ``announced_date`` is the date as written, in the announcement's own zone when it has one.
    A column of nothing but midnights UTC holds dates. Findings name each row that gives no
    moment, empty cells apart. Another ``column`` gives columns named after its own stem:
    ``rumoured_at`` makes ``rumoured_utc`` and ``rumoured_date``.
    """
    stem = column.removesuffix("_at")
    found: list[datetime | date | None] = []
    refused: dict[Refusal, list[tuple[object, str, int]]] = {}
    rows = zip(deals[column], deals["timestamp_zone"], deals[ROW], strict=True)
    for cell, own_zone, row in rows:
        moment = read_moment(cell, own_zone or default_zone, date_format)
        if isinstance(moment, Refusal):
            found.append(None)
            if not is_missing(pd.Series([cell], dtype=object)).any():
                refused.setdefault(moment, []).append((cell, own_zone or default_zone, int(row)))
        else:
            found.append(moment)
    timed = [moment for moment in found if isinstance(moment, datetime)]
    midnights = len(timed) > 1 and all(moment.isoformat().endswith(MIDNIGHT) for moment in timed)
    instants = [m if isinstance(m, datetime) and not midnights else None for m in found]
    dates = [m.date() if isinstance(m, datetime) else m for m in found]
    utc = pd.to_datetime(pd.Series(instants, index=deals.index), utc=True)
    written = pd.Series(dates, index=deals.index, dtype=DAY)
    moments = deals.assign(**{f"{stem}_utc": utc.dt.as_unit("s"), f"{stem}_date": written})
    named = source.columns.get(column, column)
    findings = serial_doubt(written, date_format, source.file, named)
    unread = [Cell(cell, row) for cell, _, row in refused.pop(BAD_FORMAT, [])]
    good = deals[column][written.notna()]
    findings += date_findings(unread, good, source.file, named, BAD_FORMAT.expected)
    return moments, findings + [_finding(*item, source, named) for item in refused.items()]


def _finding(
    refusal: Refusal, cells: list[tuple[object, str, int]], source: Source, column: str
) -> Finding:
    """One finding for all cells refused for one reason, the first few by name."""
    timed = refusal in (IMPOSSIBLE, BAD_ZONE)
    named = [f"'{cell}'" + (f" in zone '{zone}'" if timed else "") for cell, zone, _ in cells]
    got = ", ".join(named[:EXAMPLES]) + (" and more" if len(named) > EXAMPLES else "")
    return Finding(
        refusal.rule,
        Severity.ERROR,
        source.file,
        got=got,
        expected=refusal.expected,
        remedy=refusal.remedy,
        rows=row_numbers(pd.Series([row for _, _, row in cells])),
        column=column,
    )
