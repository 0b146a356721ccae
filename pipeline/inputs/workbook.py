"""Reading a sheet of a workbook: cells as they were meant, within limits on their size."""

from __future__ import annotations

import re
from collections.abc import Iterator
from typing import Any
from zipfile import BadZipFile, ZipFile

import openpyxl
import pandas as pd

from pipeline.core.findings import problem
from pipeline.inputs.source import NOT_COMPUTED, ROW, Source

# What a workbook may unpack to. A sheet of the largest size a spreadsheet can hold stays below;
# an archive made to fill the memory does not.
MOST_BYTES = 1 << 30
MOST_TIMES = 200
SMALL = 1 << 24
# What says by itself what is wrong with a file, or with the machine.
SOUND_REFUSALS = (ValueError, KeyError, OSError, BadZipFile, MemoryError)
ZEROS = re.compile(r"0{2,}")


def read_sheet(source: Source) -> pd.DataFrame:
    """The cells of a sheet as written, under the names of its header row, plus ``_row``.

    A whole number shown with leading zeros is an identifier and keeps them. A formula whose
    result was never saved reads as :data:`NOT_COMPUTED`, an error cell.

    Raises:
        InputProblem: ``archive_too_large``.
        ValueError, KeyError, OSError, BadZipFile: if it is no workbook, or lacks the sheet.
    """
    _refuse_bomb(source)
    rows = list(_rows(source, computed=True))
    header = [str(name) if name is not None else "" for name in rows[0]] if rows else []
    width = max((len(row) for row in rows), default=0)
    names = [
        header[at] if at < len(header) and header[at] else f"Unnamed: {at}" for at in range(width)
    ]
    cells = [row + [None] * (width - len(row)) for row in rows[1:]]
    table = pd.DataFrame(cells, columns=range(width), dtype=object)
    if table.isna().any(axis=None) and _has_formulas(source):
        table = _with_formulas(table, source)
    table = table.where(table.notna(), "")
    table.columns = pd.Index(names, dtype=object)
    unused = [
        at for at, name in enumerate(names)
        if name.startswith("Unnamed: ") and (table.iloc[:, at] == "").all()
    ]  # fmt: skip
    table = table.iloc[:, [at for at in range(width) if at not in unused]]
    return table.assign(**{ROW: range(source.header_row + 1, source.header_row + 1 + len(table))})


def sheet_header(source: Source) -> list[str]:
    """The names in the header row that are filled."""
    _refuse_bomb(source)
    first = next(_rows(source, computed=True), [])
    return [str(name) for name in first if name is not None]


def _rows(source: Source, computed: bool) -> Iterator[list[Any]]:
    """The rows from the header on, without the empty cells at their ends."""
    try:
        yield from _read_rows(source, computed)
    except SOUND_REFUSALS:
        raise
    except Exception as fault:  # A damaged part of a workbook can raise nearly anything.
        raise ValueError(f"a damaged workbook ({fault or type(fault).__name__})") from fault


def _read_rows(source: Source, computed: bool) -> Iterator[list[Any]]:
    book = openpyxl.load_workbook(source.at, read_only=True, data_only=computed)
    try:
        sheet = book[_sheet(source, book.sheetnames)]
        # The size a file states may be far larger than what it holds.
        if hasattr(sheet, "reset_dimensions"):
            sheet.reset_dimensions()
        for row in sheet.iter_rows(min_row=source.header_row):
            cells = [_meant(cell) for cell in row]
            while cells and cells[-1] is None:
                cells.pop()
            yield cells
    finally:
        book.close()


def _meant(cell: Any) -> Any:
    value = cell.value
    if isinstance(value, int) and not isinstance(value, bool):
        shown = str(getattr(cell, "number_format", ""))
        if ZEROS.fullmatch(shown):
            return str(value).zfill(len(shown))
    return None if value == "" else value


def _sheet(source: Source, names: list[str]) -> str:
    sheet = source.sheet or names[0]
    if sheet not in names:
        raise ValueError(f"no sheet '{sheet}'; it has {', '.join(names)}")
    return sheet


def _has_formulas(source: Source) -> bool:
    with ZipFile(source.at) as archive:
        sheets = [name for name in archive.namelist() if name.startswith("xl/worksheets/")]
        return any(b"<f" in archive.read(name) for name in sheets)


def _with_formulas(table: pd.DataFrame, source: Source) -> pd.DataFrame:
    """Cells whose formula has no saved result, marked: they are not empty."""
    for at, row in enumerate(list(_rows(source, computed=False))[1:]):
        for column, value in enumerate(row):
            formula = isinstance(value, str) and value.startswith("=")
            if formula and table.iat[at, column] is None:
                table.iat[at, column] = NOT_COMPUTED
    return table


def _refuse_bomb(source: Source) -> None:
    """Refuse an archive that would unpack to far more than any workbook holds."""
    with ZipFile(source.at) as archive:
        unpacked = sum(item.file_size for item in archive.infolist())
    packed = max(source.at.stat().st_size, 1)
    if unpacked <= SMALL or (unpacked <= MOST_BYTES and unpacked <= MOST_TIMES * packed):
        return
    raise problem(
        "archive_too_large",
        source.file,
        got=f"{unpacked / 2**20:,.0f} MB once unpacked, from {packed / 2**20:,.1f} MB",
        expected=f"a workbook of at most {MOST_BYTES >> 20:,} MB, and {MOST_TIMES} times its size",
        remedy="Save the table as csv or parquet if it is really that large; do not open it "
        "otherwise.",
    )
