"""What is wrong with a column of dates: which formats it holds, and which reading fits better."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import date, datetime, timedelta

import pandas as pd

from pipeline.core.findings import Finding, Severity

# Formats that a study may declare for the serial days of a spreadsheet, and their day zero. The
# first system takes 1900 for a leap year: its day 60 never was, so day 61 on count from here.
SERIALS = {"excel": datetime(1899, 12, 30), "excel 1904": datetime(1904, 1, 1)}
SERIAL_RANGE = (20_000, 60_000)
EXAMPLES = 3
# Where the format of one table stands that writes its dates unlike the others.
ALONE = "date_format under the table's own inputs.source if only this file writes them so"
FEW_WEEKDAYS = 0.7
MONTHS = ("jan", "feb", "mar", "apr", "may", "jun", "jul", "aug", "sep", "oct", "nov", "dec")
SERIAL, SHORT_YEAR = "a spreadsheet's serial day", "a year of two digits"
DAY_FIRST, MONTH_FIRST = "day/month/year", "month/day/year"
EITHER = "day/month/year or month/day/year"
YEAR_FIRST, WORDED = "year/month/day", "a month in letters"
DATED = re.compile(r"(\d{1,4})[-/. ](\d{1,2})[-/. ](\d{1,4})(?:\D.*)?")
ISO_DASHES = re.compile(r"\d{4}-")


@dataclass(frozen=True, slots=True)
class Cell:
    """A cell with its row in the file."""

    value: object
    row: int


def serial_day(cell: object, date_format: str) -> datetime | None:
    """The moment of a declared serial day; None if none is declared or the cell is no number."""
    origin = SERIALS.get(date_format)
    number = _number(cell)
    if origin is None or number is None or not 1 <= number < 200_000:
        return None
    return origin + timedelta(seconds=round(number * 86_400))


def _number(cell: object) -> float | None:
    if isinstance(cell, bool | date):
        return None
    try:
        return float(str(cell).strip())
    except ValueError:
        return None


def shape(cell: object) -> str:
    """The format of a cell that could not be read; '' for one that holds no date in any of them.

    A cell that looks like ISO 8601 and could not be read holds no date.
    """
    if isinstance(cell, date):
        return ""
    number = _number(cell)
    if number is not None:
        return SERIAL if SERIAL_RANGE[0] <= number <= SERIAL_RANGE[1] else ""
    text = str(cell).strip()
    match = DATED.fullmatch(text)
    if match is None:
        worded = any(month in text.lower() for month in MONTHS)
        return WORDED if worded and re.search(r"\d{4}", text) else ""
    return "" if ISO_DASHES.match(text) else _figures(*match.groups())


def _figures(first: str, second: str, third: str) -> str:
    if len(first) == 4:
        return YEAR_FIRST if _is_date(int(first), int(second), int(third)) else ""
    if len(third) <= 2:
        return SHORT_YEAR
    if len(third) != 4:
        return ""
    day_first = _is_date(int(third), int(second), int(first))
    month_first = _is_date(int(third), int(first), int(second))
    if day_first and month_first:
        return EITHER
    return DAY_FIRST if day_first else MONTH_FIRST if month_first else ""


def _is_date(year: int, month: int, day: int) -> bool:
    try:
        date(year, month, day)
    except ValueError:
        return False
    return True


def date_findings(
    bad: Sequence[Cell], good: Iterable[object], file: str, column: str, expected: str
) -> list[Finding]:
    """What cells that gave no date hold: one cause, one finding.

    Args:
        bad: the cells that could not be read.
        good: the values of the column that could.
        file, column: as named in findings.
        expected: what a cell should hold.
    """
    formats: dict[str, list[Cell]] = {}
    for cell in bad:
        formats.setdefault(shape(cell.value), []).append(cell)
    findings = [_unreadable(formats.pop("", []), file, column, expected)]
    read = next(iter(good), None)
    firm = {name for name in formats if name != EITHER}
    if EITHER in formats and firm & {DAY_FIRST, MONTH_FIRST}:
        _join(formats, firm)
    if len(formats) + (read is not None) > 1 and formats:
        findings.append(_mixed(formats, read, file, column, expected))
    elif formats:
        ((name, cells),) = formats.items()
        findings.append(_one_format(name, cells, file, column, expected))
    return [finding for finding in findings if finding is not None]


def _join(formats: dict[str, list[Cell]], firm: set[str]) -> None:
    """Cells that allow both readings go with those that allow one, if all of these agree."""
    order = firm & {DAY_FIRST, MONTH_FIRST}
    if len(order) == 1:
        formats[order.pop()] += formats.pop(EITHER)


def _unreadable(cells: list[Cell], file: str, column: str, expected: str) -> Finding | None:
    if not cells:
        return None
    return _finding(
        "unparseable_date", cells, file, column, _examples(cells), expected,
        "Correct the cells, or declare their format in inputs.date_format.",
    )  # fmt: skip


def _mixed(
    formats: dict[str, list[Cell]], read: object, file: str, column: str, expected: str
) -> Finding:
    words = [f"{_examples(cells)} as {name}" for name, cells in formats.items()]
    if read is not None:
        words.append(f"'{read}' as it should be")
    cells = [cell for listed in formats.values() for cell in listed]
    return _finding(
        "mixed_date_formats", cells, file, column, "; ".join(words), expected,
        "Write the whole column in one format.",
    )  # fmt: skip


def _one_format(name: str, cells: list[Cell], file: str, column: str, expected: str) -> Finding:
    """A column of one format throughout that is not the one declared."""
    mark = _mark(cells[0])
    if name == EITHER:
        return _finding(
            "ambiguous_day_month", cells, file, column,
            f"{_examples(cells)}, which may be read day first or month first: {_both(cells)}",
            expected,
            f"Declare inputs.date_format = '%d{mark}%m{mark}%Y' or '%m{mark}%d{mark}%Y', or "
            f"{ALONE}.",
        )  # fmt: skip
    if name == SERIAL:
        return _finding(
            "serial_date", cells, file, column,
            f"{_examples(cells)}, days counted by a spreadsheet: {_both_origins(cells)}",
            expected,
            "Declare inputs.date_format = 'excel' or 'excel 1904', or write the dates out.",
        )  # fmt: skip
    if name == SHORT_YEAR:
        return _finding(
            "two_digit_year", cells, file, column, _examples(cells), "a year of four digits",
            "Write the year in full; two digits do not tell the century.",
        )  # fmt: skip
    pattern = {
        DAY_FIRST: f" = '%d{mark}%m{mark}%Y'",
        MONTH_FIRST: f" = '%m{mark}%d{mark}%Y'",
    }.get(name, "")
    return _finding(
        "unparseable_date", cells, file, column, f"{_examples(cells)}, written as {name}",
        expected, f"Declare inputs.date_format{pattern}, or {ALONE}, or write the dates as "
        "expected.",
    )  # fmt: skip


def _mark(cell: Cell) -> str:
    """What stands between the parts of a date in figures; a slash if nothing is told."""
    found = re.match(r"\d{1,4}([-/. ])", str(cell.value).strip())
    return found[1] if found else "/"


def _finding(
    rule: str, cells: list[Cell], file: str, column: str, got: str, expected: str, remedy: str
) -> Finding:
    rows = tuple(sorted(cell.row for cell in cells))
    return Finding(rule, Severity.ERROR, file, got, expected, remedy, rows=rows, column=column)


def _examples(cells: list[Cell]) -> str:
    named = list(dict.fromkeys(f"'{cell.value}'" for cell in cells))
    return ", ".join(named[:EXAMPLES]) + (" and more" if len(named) > EXAMPLES else "")


def _both(cells: list[Cell]) -> str:
    """How many dates fall on weekdays under each reading, and which fits better."""
    parts = [DATED.fullmatch(str(cell.value).strip()) for cell in cells]
    numbers = [tuple(map(int, part.groups())) for part in parts if part]
    days = [date(year, month, day) for day, month, year in numbers]
    months = [date(year, month, day) for month, day, year in numbers]
    return _better({"day first": days, "month first": months})


def _both_origins(cells: list[Cell]) -> str:
    read = {
        f"'{name}'": [origin + timedelta(days=_number(cell.value) or 0) for cell in cells]
        for name, origin in SERIALS.items()
    }
    first = " or ".join(f"{days[0]:%Y-%m-%d} under {name}" for name, days in read.items())
    return f"the first is {first}; {_better(read)}"


def _better(readings: Mapping[str, Sequence[date]]) -> str:
    """Weekday share of each reading, with the one that fits better: exchanges open on weekdays."""
    shares = {name: sum(day.weekday() < 5 for day in days) / len(days)
              for name, days in readings.items()}  # fmt: skip
    told = ", ".join(f"{name} {share:.0%} fall on weekdays" for name, share in shares.items())
    best = max(shares, key=lambda name: shares[name])
    even = max(shares.values()) - min(shares.values()) < 0.05
    return told + ("; neither fits better" if even else f"; {best} fits better")


def serial_doubt(days: pd.Series, date_format: str, file: str, column: str) -> list[Finding]:
    """A warning when dates made of declared serial days fall on weekends more than exchanges allow.

    The other system's dates lie four years and a day apart, on another day of the week.
    """
    known = days.dropna()
    if date_format not in SERIALS or known.empty:
        return []
    share = float((known.dt.day_of_week < 5).mean())
    if share >= FEW_WEEKDAYS:
        return []
    other = next(name for name in SERIALS if name != date_format)
    shift = SERIALS[other] - SERIALS[date_format]
    would = float(((known + shift).dt.day_of_week < 5).mean())
    return [
        Finding(
            "serial_date",
            Severity.WARNING,
            file,
            got=f"{share:.0%} of the dates on weekdays under '{date_format}'",
            expected=f"most dates on weekdays; '{other}' would give {would:.0%}",
            remedy=f"Check whether inputs.date_format should be '{other}'.",
            column=column,
        )
    ]
