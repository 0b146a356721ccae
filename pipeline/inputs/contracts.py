"""Column contracts: what each cell must be, and a finding for each that is not."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd

from pipeline.core.findings import Finding, Severity
from pipeline.inputs.files import ROW, Source

MISSING_WORDS = {"", "n/a", "na", "#n/a", "nan", "none", "null", "-", ".", "nat"}
TRUE_WORDS = {"1", "1.0", "true", "yes", "y"}
FALSE_WORDS = {"0", "0.0", "false", "no", "n"}
EARLIEST, LATEST = pd.Timestamp("1950-01-01"), pd.Timestamp("2100-01-01")
EXAMPLES = 5


@dataclass(frozen=True, slots=True)
class Column:
    """One column of a contract.

    ``kind`` is ``text``, ``number``, ``flag``, ``date`` or ``stamp`` (kept as written, read by
    :mod:`pipeline.inputs.moments`); a ``filled`` column may have no empty cell; an optional
    column may be absent, and is then made with missing values.
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
        ``str`` with '' for missing, numbers and flags as float64 with NaN, dates as
        ``datetime64`` at midnight with NaT, stamps untouched.
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
        values, bad = _read(raw, column.kind, date_format)
        typed[column.name] = values
        findings += _bad_cells(raw[bad], table.loc[bad, ROW], source, column)
        if column.filled:
            empty = _is_missing(raw)
            findings += _empty_cells(table.loc[empty, ROW], source, column)
        if column.kind == "date":
            wrong = values.notna() & ~values.between(EARLIEST, LATEST)
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


def _is_missing(raw: pd.Series) -> pd.Series:
    if not pd.api.types.is_object_dtype(raw) and not pd.api.types.is_string_dtype(raw):
        return raw.isna()
    return raw.isna() | raw.astype(str).str.strip().str.lower().isin(MISSING_WORDS)


def _read_text(raw: pd.Series) -> tuple[pd.Series, pd.Series]:
    def word(cell: object) -> str:
        if isinstance(cell, float) and cell.is_integer():
            return str(int(cell))
        return str(cell).strip()

    missing = _is_missing(raw)
    values = raw.map(word) if raw.dtype == object or raw.dtype.kind == "f" else raw.astype(str)
    values = values.str.strip().where(~missing, "").astype("str")
    return values, pd.Series(False, index=raw.index)


def _read_number(raw: pd.Series) -> tuple[pd.Series, pd.Series]:
    values = pd.to_numeric(raw, errors="coerce").astype(np.float64)
    bad = values.isna() & ~_is_missing(raw)
    return values, bad | np.isinf(values)


def _read_flag(raw: pd.Series) -> tuple[pd.Series, pd.Series]:
    words = raw.astype(str).str.strip().str.lower()
    values = pd.Series(np.nan, index=raw.index)
    values[words.isin(TRUE_WORDS)] = 1.0
    values[words.isin(FALSE_WORDS)] = 0.0
    return values, values.isna() & ~_is_missing(raw)


def read_dates(raw: pd.Series, date_format: str = "") -> tuple[pd.Series, pd.Series]:
    """Calendar dates, and which cells are none.

    A cell must be a date already, or text in ISO 8601 or the declared format. Bare numbers are
    refused: a spreadsheet's serial day has two origins, and nothing tells which.
    """
    if pd.api.types.is_datetime64_any_dtype(raw):
        return raw.dt.tz_localize(None).dt.normalize(), pd.Series(False, index=raw.index)
    missing = _is_missing(raw)
    texts = raw.where(~missing).map(_date_text, na_action="ignore")
    if date_format:
        values = pd.to_datetime(texts, format=date_format, errors="coerce")
        plain = pd.to_datetime(texts, format="%Y-%m-%d", errors="coerce")
        values = values.fillna(plain)
    else:
        values = pd.to_datetime(texts.str.slice(0, 10), format="%Y-%m-%d", errors="coerce")
    return values.dt.normalize(), values.isna() & ~missing


def _date_text(cell: object) -> str:
    if isinstance(cell, int | float) and not isinstance(cell, bool):
        return "number"
    return cell.isoformat(sep=" ") if hasattr(cell, "hour") else str(cell).strip()  # type: ignore[attr-defined]


READ: dict[str, Callable[[pd.Series], tuple[pd.Series, pd.Series]]] = {
    "text": _read_text,
    "number": _read_number,
    "flag": _read_flag,
}
EXPECTED = {
    "number": "a number with a decimal point, or an empty cell",
    "flag": "1 or 0 (yes or no), or an empty cell",
    "date": "a date as YYYY-MM-DD",
}
RULE = {"number": "unparseable_number", "flag": "unparseable_number", "date": "unparseable_date"}
REMEDY = {
    "number": "Correct the cells; leave them empty if the value is not known.",
    "flag": "Write 1 for yes and 0 for no.",
    "date": "Write YYYY-MM-DD, or declare your format in inputs.date_format.",
}


def _nothing(kind: str, index: pd.Index) -> pd.Series:
    if kind in ("text", "stamp"):
        return pd.Series("", index=index, dtype="str")
    if kind == "date":
        return pd.Series(pd.NaT, index=index, dtype="datetime64[ns]")
    return pd.Series(np.nan, index=index)


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


def row_list(rows: pd.Series) -> str:
    """The first few row numbers, and how many more there are."""
    shown = ", ".join(str(int(row)) for row in rows[:EXAMPLES])
    return shown + (f" and {len(rows) - EXAMPLES} more" if len(rows) > EXAMPLES else "")


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
            remedy=REMEDY[column.kind],
            row=row_list(rows),
            column=source.columns.get(column.name, column.name),
        )
    ]


def _empty_cells(rows: pd.Series, source: Source, column: Column) -> list[Finding]:
    if rows.empty:
        return []
    return [
        Finding(
            "missing_value",
            Severity.ERROR,
            source.file,
            got=f"{len(rows)} empty cell" + ("s" if len(rows) > 1 else ""),
            expected="a value in every row",
            remedy="Fill the cells, or delete the rows.",
            row=row_list(rows),
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
            row=row_list(rows),
            column=source.columns.get(column.name, column.name),
        )
    ]
