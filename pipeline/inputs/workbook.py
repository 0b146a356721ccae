"""Reading a sheet of a workbook: cells as they were meant, within limits on their size."""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from typing import Any
from zipfile import BadZipFile, ZipFile

import numpy as np
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
    rows = dict(_rows(source, computed=True))
    if _any_empty(rows) and _has_formulas(source):
        _mark_formulas(rows, source)
    header = rows.pop(source.header_row, [])
    rows = dict(sorted(rows.items()))
    # One cell in the last row or column of a sheet must not make a table of a million rows.
    used = sorted(
        {at for row in (header, *rows.values()) for at, cell in enumerate(row) if cell is not None}
    )
    names = [_name(header, at) for at in used]
    cells = [[row[at] if at < len(row) else None for at in used] for row in rows.values()]
    table = pd.DataFrame(cells, columns=range(len(used)), dtype=object)
    table = table.where(table.notna(), "")
    table.columns = pd.Index(names, dtype=object)
    return table.assign(**{ROW: np.array(list(rows), dtype=np.int64)})


def _name(header: list[Any], at: int) -> str:
    named = at < len(header) and header[at] is not None
    return str(header[at]) if named else f"Unnamed: {at}"


def _any_empty(rows: Mapping[int, list[Any]]) -> bool:
    """Whether a cell is empty, so that it may be a formula without a result."""
    width = max((len(row) for row in rows.values()), default=0)
    return not rows or any(len(row) < width or None in row for row in rows.values())


def sheet_header(source: Source) -> list[str]:
    """The names in the header row that are filled."""
    _refuse_bomb(source)
    number, first = next(_rows(source, computed=True), (0, []))
    if number != source.header_row:
        return []
    return [str(name) for name in first if name is not None]


def _rows(source: Source, computed: bool) -> Iterator[tuple[int, list[Any]]]:
    """Number and cells of each filled row from the header on, less the empty cells at its end."""
    try:
        yield from _read_rows(source, computed)
    except SOUND_REFUSALS:
        raise
    except Exception as fault:  # A damaged part of a workbook can raise nearly anything.
        raise ValueError(f"a damaged workbook ({fault or type(fault).__name__})") from fault


def _read_rows(source: Source, computed: bool) -> Iterator[tuple[int, list[Any]]]:
    book = openpyxl.load_workbook(source.at, read_only=True, data_only=computed)
    try:
        sheet = book[_sheet(source, book.sheetnames)]
        # The size a file states may be far larger than what it holds.
        if hasattr(sheet, "reset_dimensions"):
            sheet.reset_dimensions()
        rows = sheet.iter_rows(min_row=source.header_row)
        for number, row in enumerate(rows, start=source.header_row):
            cells = [_meant(cell) for cell in row]
            while cells and cells[-1] is None:
                cells.pop()
            if cells:
                yield number, cells
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


def _mark_formulas(rows: dict[int, list[Any]], source: Source) -> None:
    """Cells whose formula has no saved result are marked: they are not empty."""
    for number, row in _rows(source, computed=False):
        cells = rows.get(number, [])
        cells += [None] * (len(row) - len(cells))
        for column, value in enumerate(row):
            if isinstance(value, str) and value.startswith("=") and cells[column] is None:
                cells[column] = NOT_COMPUTED
        if any(cell is not None for cell in cells):
            rows[number] = cells


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
