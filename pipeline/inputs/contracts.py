"""Column contracts: what each cell must be, and a finding for each that is not."""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from difflib import get_close_matches
from typing import Final

import numpy as np
import pandas as pd

from pipeline.core.findings import Finding, Severity
from pipeline.inputs.date_formats import SERIALS, Cell, date_findings, serial_day, serial_doubt
from pipeline.inputs.numerals import comma_remedy, lost_digits, with_points
from pipeline.inputs.source import NOT_COMPUTED, ROW, Source

MISSING_WORDS = {"", "n/a", "na", "#n/a", "nan", "none", "null", "-", ".", "nat"}
ERROR_WORDS = {"#DIV/0!", "#REF!", "#VALUE!", "#NAME?", "#NUM!", "#NULL!", "#SPILL!", "#CALC!",
               NOT_COMPUTED}  # fmt: skip
YES_OR_NO = {"true": 1.0, "yes": 1.0, "false": 0.0, "no": 0.0}
ISO = re.compile(r"\d{4}-\d{2}-\d{2}([T ]\d{2}:\d{2}(:\d{2}(\.\d+)?)?(Z|[+-]\d{2}:?\d{2})?)?")
EARLIEST, LATEST = pd.Timestamp("1950-01-01"), pd.Timestamp("2100-01-01")
# What a data base writes where it has no date, and no exchange ever opened on: common practice.
FILL_VALUES = [pd.Timestamp("1970-01-01")]
EXAMPLES = 5
DAY: Final = "datetime64[s]"


@dataclass(frozen=True, slots=True)
class Column:
    """One column of a contract.

    ``kind`` is ``text``, ``number`` (yes and no are 1 and 0), ``date`` or ``stamp`` (kept as
    written, read by :mod:`pipeline.inputs.moments`); a ``filled`` column may have no empty cell;
    an optional column may be absent, and is then made with missing values.
    """

    name: str
    kind: str
    filled: bool = False
    optional: bool = False
    why: str = ""


def apply_contract(
    table: pd.DataFrame, source: Source, columns: Sequence[Column], date_format: str = ""
) -> tuple[pd.DataFrame, list[Finding]]:
    """The table's contracted columns, typed, and all that is wrong with them.

    Returns:
        A frame of the contracted columns and ``_row``, in the order of the contract: text as
        ``str`` with '' for missing, numbers as float64 with NaN, dates as ``datetime64[s]``
        at midnight with NaT, stamps untouched.
    """
    findings: list[Finding] = []
    typed: dict[str, pd.Series] = {}
    for column in columns:
        if column.name not in table.columns:
            if not column.optional:
                findings.append(_absent(table, source, column))
            typed[column.name] = _nothing(column.kind, table.index)
            continue
        raw = table[column.name]
        broken = _is_error(raw)
        findings += _error_cells(raw[broken], table.loc[broken, ROW], source, column)
        raw = raw.mask(broken) if broken.any() else raw
        raw = with_points(raw, source) if column.kind == "number" else raw
        values, bad = _read(raw, column.kind, date_format)
        typed[column.name] = values
        if column.kind == "date":
            findings += _bad_dates(raw, values, bad, table[ROW], source, column)
            named = source.columns.get(column.name, column.name)
            findings += serial_doubt(values, date_format, source.file, named)
        else:
            findings += _bad_cells(raw[bad], table.loc[bad, ROW], source, column)
        if column.kind == "text":
            findings += _lost_digits(raw, table[ROW], source, column)
        if column.filled:
            empty = is_missing(raw) & ~broken
            findings += _empty_cells(raw[empty], table.loc[empty, ROW], source, column)
        if column.kind == "date":
            wrong = values.notna() & (~values.between(EARLIEST, LATEST) | values.isin(FILL_VALUES))
            findings += _out_of_range(raw[wrong], table.loc[wrong, ROW], source, column)
    frame = pd.DataFrame(typed, index=table.index)
    frame[ROW] = table[ROW]
    return frame, findings


def _read(raw: pd.Series, kind: str, date_format: str) -> tuple[pd.Series, pd.Series]:
    if kind == "stamp":
        return raw, pd.Series(False, index=raw.index)
    if kind == "date":
        return read_dates(raw, date_format)
    return READ[kind](raw)


def is_missing(raw: pd.Series) -> pd.Series:
    """Cells without a value, and those with a word for none."""
    if not _may_hold_text(raw):
        return raw.isna()
    return raw.isna() | raw.astype(str).str.strip().str.lower().isin(MISSING_WORDS)


def _is_error(raw: pd.Series) -> pd.Series:
    """Cells that hold what a spreadsheet writes where a formula failed."""
    return raw.isin(ERROR_WORDS) if _may_hold_text(raw) else pd.Series(False, index=raw.index)


def _may_hold_text(raw: pd.Series) -> bool:
    return bool(pd.api.types.is_object_dtype(raw) or pd.api.types.is_string_dtype(raw))


def _read_text(raw: pd.Series) -> tuple[pd.Series, pd.Series]:
    def word(cell: object) -> str:
        if isinstance(cell, float) and cell.is_integer():
            return str(int(cell))
        return str(cell).strip()

    missing = is_missing(raw)
    mixed = raw.dtype == object or raw.dtype.kind == "f"
    values = (raw.map(word) if mixed else raw.astype(str)).astype("str")
    values = values.str.strip().where(~missing, "").astype("str")
    return values, pd.Series(False, index=raw.index)


def _read_number(raw: pd.Series) -> tuple[pd.Series, pd.Series]:
    if pd.api.types.is_datetime64_any_dtype(raw):  # would pass as nanoseconds since 1970
        return pd.Series(np.nan, index=raw.index), raw.notna()
    values = pd.to_numeric(raw, errors="coerce").astype(np.float64)
    bad = values.isna() & ~is_missing(raw)
    if bad.any() and _may_hold_text(raw):
        words = raw[bad].astype(str).str.strip().str.lower().map(YES_OR_NO)
        values[bad] = words.astype(np.float64)
        bad &= values.isna()
    return values, bad | np.isinf(values)


def read_dates(raw: pd.Series, date_format: str = "") -> tuple[pd.Series, pd.Series]:
    """Calendar dates, and which cells are none.

    A cell must be a date already, or text in ISO 8601 or the declared format; a time of day is
    left off. Bare numbers are refused unless declared ('excel', 'excel 1904'): a spreadsheet's
    serial day has two origins, and nothing tells which. So are stored instants other than
    midnight UTC, whose date depends on a zone.
    """
    if pd.api.types.is_datetime64_any_dtype(raw):
        return _stored_dates(raw)
    missing = is_missing(raw)
    texts = raw.where(~missing).map(_date_text, na_action="ignore").astype(object)
    plain = texts.where(texts.str.fullmatch(ISO, na=False).astype(bool)).str.slice(0, 10)
    values = pd.to_datetime(plain, format="%Y-%m-%d", errors="coerce")
    if date_format in SERIALS:
        days = raw.where(~missing).map(lambda cell: serial_day(cell, date_format))
        values = values.fillna(pd.to_datetime(days.astype(object), errors="coerce"))
        return values.dt.normalize().astype(DAY), values.isna() & ~missing
    for declared in (date_part(date_format), date_format):
        if declared and "%z" not in declared:
            values = pd.to_datetime(texts, format=declared, errors="coerce").fillna(values)
    return values.dt.normalize().astype(DAY), values.isna() & ~missing


def date_part(date_format: str) -> str:
    """A declared format up to its time of day."""
    return re.split(r"[T ,]*%[HIXz]", date_format, maxsplit=1)[0]


def _stored_dates(raw: pd.Series) -> tuple[pd.Series, pd.Series]:
    clock = raw.dt.tz_localize(None)
    days = clock.dt.normalize()
    doubtful = raw.notna() & (clock != days) & (raw.dt.tz is not None)
    return days.mask(doubtful).astype(DAY), doubtful


def _date_text(cell: object) -> str:
    if isinstance(cell, int | float) and not isinstance(cell, bool):
        return "number"
    return cell.isoformat(sep=" ") if hasattr(cell, "hour") else str(cell).strip()  # type: ignore[attr-defined]


READ: dict[str, Callable[[pd.Series], tuple[pd.Series, pd.Series]]] = {
    "text": _read_text,
    "number": _read_number,
}
EXPECTED = {
    "number": "a number with a decimal point, or an empty cell",
    "date": "a date as YYYY-MM-DD",
}
RULE = {"number": "unparseable_number"}
REMEDY = {
    "number": "Correct the cells; leave them empty if the value is not known.",
}


def _nothing(kind: str, index: pd.Index) -> pd.Series:
    if kind in ("text", "stamp"):
        return pd.Series("", index=index, dtype="str")
    if kind == "date":
        return pd.Series(pd.NaT, index=index, dtype=DAY)
    return pd.Series(np.nan, index=index)


def unknown_names(source: Source, columns: Sequence[Column]) -> list[Finding]:
    """An error for each name under [inputs.columns] that the table's contract does not know."""
    known = [column.name for column in columns]
    return [
        Finding(
            "unknown_key",
            Severity.ERROR,
            "study file",
            got=f"'{name}', which the table {source.table} does not have",
            expected="one of " + ", ".join(known),
            remedy=f"Did you mean '{get_close_matches(name, known, 1, 0.0)[0]}'?",
            column=f"inputs.columns.{source.table}.{name}",
        )
        for name in source.columns
        if name not in known
    ]


def unknown_units(source: Source, columns: Sequence[Column]) -> list[Finding]:
    """An error for each unit declared of something that is no column of numbers of the table."""
    known = [column.name for column in columns if column.kind == "number"]
    return [
        Finding(
            "unknown_key",
            Severity.ERROR,
            "study file",
            got=f"a unit of '{name}', which is no column of numbers that the study reads",
            expected="one of " + ", ".join(known),
            remedy="Correct the name, or delete the key.",
            column=f"inputs.source.{source.table}.units.{name}",
        )
        for name in source.factors
        if name not in known
    ]


def _absent(table: pd.DataFrame, source: Source, column: Column) -> Finding:
    theirs = source.columns.get(column.name, column.name)
    have = ", ".join(str(name) for name in table.columns if name != ROW)
    return Finding(
        "missing_column",
        Severity.ERROR,
        source.file,
        got=f"no such column; the file has {have}",
        expected=f"a column '{theirs}'" + (f", {column.why}" if column.why else ""),
        remedy=f"Add it, or write [inputs.columns.{source.table}] {column.name} = 'your name'.",
        column=theirs,
    )


def row_numbers(rows: pd.Series) -> tuple[int, ...]:
    """The numbers of rows as their reader counts them."""
    return tuple(int(row) for row in rows)


def _bad_cells(cells: pd.Series, rows: pd.Series, source: Source, column: Column) -> list[Finding]:
    if cells.empty:
        return []
    examples = ", ".join(f"'{cell}'" for cell in cells[:EXAMPLES])
    return [
        Finding(
            RULE[column.kind],
            Severity.ERROR,
            source.file,
            got=examples,
            expected=EXPECTED[column.kind],
            remedy=comma_remedy(cells, source) or _sign_remedy(cells) or REMEDY[column.kind],
            rows=row_numbers(rows),
            column=source.columns.get(column.name, column.name),
        )
    ]


def _sign_remedy(cells: pd.Series) -> str:
    """What to do with cells that each end in a percent sign; '' for others."""
    texts = cells.astype(str).str.strip()
    if not texts.str.fullmatch(r"[-+]?[\d.]+\s*%").all():
        return ""
    bare = texts.iloc[0].rstrip("% ")
    return f"Take the signs away in the whole column: {bare} for '{texts.iloc[0]}'."


def _lost_digits(raw: pd.Series, rows: pd.Series, source: Source, column: Column) -> list[Finding]:
    """An error for codes of which a spreadsheet kept fifteen digits, or a power of ten."""
    lost = lost_digits(raw)
    if not lost.any():
        return []
    return [
        Finding(
            "lost_digits",
            Severity.ERROR,
            source.file,
            got=", ".join(f"'{cell}'" for cell in raw[lost][:EXAMPLES]),
            expected="codes with all their digits",
            remedy="Format the column as text before the codes are put in, and export it again.",
            rows=row_numbers(rows[lost]),
            column=source.columns.get(column.name, column.name),
        )
    ]


def _bad_dates(
    raw: pd.Series,
    values: pd.Series,
    bad: pd.Series,
    rows: pd.Series,
    source: Source,
    column: Column,
) -> list[Finding]:
    """What the cells of a column of dates hold that could not be read."""
    if not bad.any():
        return []
    cells = [Cell(value, int(row)) for value, row in zip(raw[bad], rows[bad], strict=True)]
    named = source.columns.get(column.name, column.name)
    return date_findings(cells, raw[values.notna()], source.file, named, EXPECTED["date"])


def _error_cells(
    cells: pd.Series, rows: pd.Series, source: Source, column: Column
) -> list[Finding]:
    if cells.empty:
        return []
    return [
        Finding(
            "error_cell",
            Severity.ERROR,
            source.file,
            got=", ".join(f"'{cell}'" for cell in dict.fromkeys(cells)),
            expected="a value, or an empty cell",
            remedy="Correct the formulas, or empty the cells.",
            rows=row_numbers(rows),
            column=source.columns.get(column.name, column.name),
        )
    ]


def _empty_cells(
    cells: pd.Series, rows: pd.Series, source: Source, column: Column
) -> list[Finding]:
    if rows.empty:
        return []
    got = f"{len(rows)} empty cell" + ("s" if len(rows) > 1 else "")
    remedy = "Fill the cells, or delete the rows."
    words = [word for word in dict.fromkeys(cells.dropna().astype(str).str.strip()) if word]
    if words and column.kind == "text":
        told = " or ".join(f"'{word}'" for word in words)
        got = f"{len(rows)} cell{'s' if len(rows) > 1 else ''} empty or {told}, a word for none"
        remedy += f" If {told} is a code of yours, write another one in every table, such as NA.X."
    return [
        Finding(
            "missing_value",
            Severity.ERROR,
            source.file,
            got=got,
            expected="a value in every row",
            remedy=remedy,
            rows=row_numbers(rows),
            column=source.columns.get(column.name, column.name),
        )
    ]


def _out_of_range(
    cells: pd.Series, rows: pd.Series, source: Source, column: Column
) -> list[Finding]:
    if cells.empty:
        return []
    return [
        Finding(
            "date_out_of_range",
            Severity.ERROR,
            source.file,
            got=", ".join(f"'{cell}'" for cell in cells[:EXAMPLES]),
            expected=f"dates from {EARLIEST:%Y-%m-%d} to {LATEST:%Y-%m-%d}",
            remedy="Correct the dates; such values are often fill values of a data base.",
            rows=row_numbers(rows),
            column=source.columns.get(column.name, column.name),
        )
    ]
