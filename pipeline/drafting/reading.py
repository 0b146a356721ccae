"""Reading a table of the folder as its own bytes and rows tell how it is written."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pandas as pd

from pipeline.core.findings import InputProblem
from pipeline.inputs.files import read_table
from pipeline.inputs.source import Source

SPREADSHEETS = "cp1252"
DEEPEST_HEADER = 8
UNNAMED = "unnamed"


def read_as_written(source: Source) -> tuple[Source, pd.DataFrame]:
    """The cells of a table, and how they could be read.

    A csv file that is not UTF-8 is taken for what most spreadsheets write, and of a sheet whose
    first row leaves most columns without a name a lower row that names them all is the header.

    Raises:
        InputProblem: if it cannot be read either way.
    """
    try:
        frame = read_table(source)
    except InputProblem:
        if source.kind != ".csv" or source.encoding or _is_utf8(source.path):
            raise
        source = replace(source, encoding=SPREADSHEETS)
        frame = read_table(source)
    if source.kind == ".xlsx" and source.header_row == 1 and _unnamed(frame) >= 0.5:
        return _below_a_title(source, frame)
    return source, frame


def _below_a_title(source: Source, frame: pd.DataFrame) -> tuple[Source, pd.DataFrame]:
    for row in range(2, DEEPEST_HEADER + 1):
        lower = replace(source, header_row=row)
        try:
            found = read_table(lower)
        except InputProblem:
            break
        if _unnamed(found) == 0:
            return lower, found
    return source, frame


def _unnamed(frame: pd.DataFrame) -> float:
    """The share of columns without a name, of the widest table a header could have."""
    names = [str(name).lower() for name in frame.columns[:-1]]
    return sum(name.startswith(UNNAMED) for name in names) / max(1, len(names))


def _is_utf8(path: Path) -> bool:
    try:
        path.read_bytes().decode("utf-8-sig")
    except UnicodeDecodeError:
        return False
    return True
