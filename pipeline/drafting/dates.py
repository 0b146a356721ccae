"""How the dates of a column are written, as far as the cells tell it."""

from __future__ import annotations

import re
from collections import Counter
from dataclasses import dataclass

import pandas as pd

from pipeline.drafting.likeness import likeness
from pipeline.inputs.contracts import READ, read_dates
from pipeline.inputs.date_formats import (
    DAY_FIRST,
    EITHER,
    MONTH_FIRST,
    SERIAL,
    SHORT_YEAR,
    WORDED,
    YEAR_FIRST,
    shape,
)

NEARLY_ALL = 0.95
CLOCK = re.compile(r"\d{1,2}:\d{2}")
MIDNIGHT = re.compile(r"(?<!\d)0{1,2}:00(?::00(?:\.0+)?)?(?!\d)")
OFFSET = re.compile(r"(?:Z|[+-]\d{2}:?\d{2})$")
FIGURES = re.compile(r"\d{1,4}([-/. ])\d{1,2}([-/. ])\d{1,4}(\s+\d{1,2}:\d{2}(:\d{2})?( ?[AP]M)?)?")
COMPACT = re.compile(r"(19|20)\d{2}(0[1-9]|1[0-2])(0[1-9]|[12]\d|3[01])")
ORDERS = {DAY_FIRST: ("%d", "%m", "%Y"), MONTH_FIRST: ("%m", "%d", "%Y")}
IN_WORDS = ("%d %b %Y", "%d %B %Y", "%d-%b-%Y", "%d-%B-%Y", "%b %d, %Y", "%B %d, %Y", "%b %d %Y")
DATE_WORDS = ("date", "day", "announced", "announcement", "dated", "time")


@dataclass(frozen=True, slots=True)
class Dating:
    """How dates are written.

    Attributes:
        declared: the value of inputs.date_format that reads them; '' for YYYY-MM-DD.
        open: the values between which only the analyst can tell; empty if the cells tell.
        trouble: why no value reads them; '' if one does.
        timed: whether cells hold times of day; ``offset`` whether all of these hold an offset.
        example: one cell.
    """

    declared: str = ""
    open: tuple[str, ...] = ()
    trouble: str = ""
    timed: bool = False
    offset: bool = False
    example: str = ""


def dating_of(name: str, cells: pd.Series) -> Dating | None:
    """How the filled ``cells`` of a column are written; None if they are no dates."""
    if pd.api.types.is_datetime64_any_dtype(cells):
        return _stored(cells)
    texts = cells.astype(str).str.strip()
    example = str(texts.iloc[0])
    read, _ = read_dates(cells)
    if float(read.notna().mean()) >= NEARLY_ALL:
        return Dating("", timed=_timed(texts), offset=_offset(texts), example=example)
    numbers, bad = READ["number"](cells)
    if not bad.any():
        return _figures_alone(name, texts, numbers)
    shapes = Counter(shape(cell) for cell in cells)
    if sum(count for key, count in shapes.items() if key) < NEARLY_ALL * len(cells):
        return None
    shapes.pop("", None)
    return _written(set(shapes), texts, example)


def _stored(cells: pd.Series) -> Dating:
    clock = cells.dt.tz_localize(None)
    timed = bool((clock != clock.dt.normalize()).any())
    return Dating("", timed=timed, offset=cells.dt.tz is not None, example=str(cells.iloc[0]))


def _timed(texts: pd.Series) -> bool:
    with_clock = texts[texts.str.contains(CLOCK)]
    return bool(len(with_clock)) and not bool(with_clock.str.contains(MIDNIGHT).all())


def _offset(texts: pd.Series) -> bool:
    with_clock = texts[texts.str.contains(CLOCK)]
    return bool(len(with_clock)) and bool(with_clock.str.contains(OFFSET).all())


def _figures_alone(name: str, texts: pd.Series, numbers: pd.Series) -> Dating | None:
    """Dates without marks, or days counted by a spreadsheet where the name speaks of dates."""
    example = str(texts.iloc[0])
    if bool(texts.str.fullmatch(COMPACT).all()):
        return Dating("%Y%m%d", example=example)
    serial = all(shape(cell) == SERIAL for cell in numbers)
    if serial and likeness(name, DATE_WORDS) > 0:
        return Dating("", open=("excel", "excel 1904"), example=example)
    return None


def _written(shapes: set[str], texts: pd.Series, example: str) -> Dating:
    timed = _timed(texts)
    firm = shapes - {EITHER}
    if SHORT_YEAR in shapes:
        return Dating(trouble="a year of two digits", timed=timed, example=example)
    if len(firm) > 1:
        listed = " and ".join(sorted(firm))
        return Dating(trouble=f"several formats in one column: {listed}", timed=timed,
                      example=example)  # fmt: skip
    if not firm:
        readings = tuple(_pattern(texts, ORDERS[order]) for order in (DAY_FIRST, MONTH_FIRST))
        return Dating(open=readings, timed=timed, example=example)
    (order,) = firm
    if order == WORDED:
        return _in_words(texts, timed, example)
    parts = ORDERS.get(order, ("%Y", "%m", "%d"))
    assert order in ORDERS or order == YEAR_FIRST
    return Dating(_pattern(texts, parts), timed=timed, offset=_offset(texts), example=example)


def _pattern(texts: pd.Series, parts: tuple[str, str, str]) -> str:
    """The strptime pattern of cells in figures, with their own marks and clock."""
    longest = max(texts, key=len)
    match = FIGURES.match(longest)
    if match is None:
        return parts[0] + "/" + parts[1] + "/" + parts[2]
    first, second, clock, seconds, half = match.groups()
    day = f"{parts[0]}{first}{parts[1]}{second}{parts[2]}"
    if not clock:
        return day
    hours = " %I:%M" if half else " %H:%M"
    return day + hours + (":%S" if seconds else "") + (" %p" if half else "")


def _in_words(texts: pd.Series, timed: bool, example: str) -> Dating:
    for pattern in IN_WORDS:
        for clock in ("", " %H:%M", " %H:%M:%S"):
            read = pd.to_datetime(texts, format=pattern + clock, errors="coerce")
            if read.notna().all():
                return Dating(pattern + clock, timed=timed, example=example)
    return Dating(trouble="months in letters in no format known here", timed=timed, example=example)
