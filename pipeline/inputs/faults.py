"""Why a csv file is no table, said by row: readers only say that it is none."""

from __future__ import annotations

import csv
from itertools import chain
from pathlib import Path

from pipeline.core.findings import InputProblem, problem
from pipeline.inputs.source import Source

MARKS = ",;\t|"
# The reader's own limit for a line.
LONGEST = 2_000_000


def csv_fault(source: Source) -> InputProblem | None:
    """The first row that is not in its encoding, is too long, or is no match for the header.

    Returns:
        The problem to raise, or None if nothing is found. Rows count from the first line as row 1,
        blank ones included.
    """
    row, width = source.header_row, None
    try:
        with source.at.open(newline="", encoding=source.encoding or "utf-8-sig") as text:
            for _ in range(source.header_row - 1):
                text.readline(LONGEST)
            header = text.readline(LONGEST)
            mark = source.delimiter or max(MARKS, key=header.count)
            if len(header) == LONGEST:
                return _too_long(source, row)
            rows = csv.reader(chain([header], text), delimiter=mark, strict=True)
            width = len(next(rows, []))
            for row, cells in enumerate(rows, start=source.header_row + 1):
                if cells and len(cells) != width:
                    remedy = f"Complete the row, or put text that holds a '{mark}' in quotes."
                    expected = f"{width} cells, as the header has"
                    return _fault(source, f"{len(cells)} cells", expected, remedy, row)
    except UnicodeDecodeError:
        return problem(
            "unreadable_file",
            source.file,
            got="a character of another encoding",
            expected=f"text in {source.encoding or 'UTF-8'}",
            remedy="Save the table again as CSV in UTF-8, or name the encoding it has: "
            f"inputs.source.{source.table}.encoding = 'cp1252' is that of many spreadsheets.",
            row=str(_first_undecodable(source.at)),
        )
    except csv.Error as fault:
        # Raised before the row is counted; a header that cannot be read counts as none.
        return _misquoted(source, row if width is None else row + 1, str(fault))
    return None


def _misquoted(source: Source, row: int, said: str) -> InputProblem:
    """What a strict reader of quotation marks says, in plain words."""
    if "larger than" in said:
        return _too_long(source, row)
    if "end of data" in said:  # it took the rest of the file with it
        got = "a quotation mark that is never closed"
    else:
        got = "letters after a quotation mark that closes a cell"
    remedy = "Close it, or double it where it belongs to the text."
    return _fault(source, got, "quotation marks in pairs", remedy, row)


def _too_long(source: Source, row: int) -> InputProblem:
    limit = f"cells of at most {csv.field_size_limit():,} characters"
    remedy = "Look for a quotation mark that is never closed, or shorten the cell."
    return _fault(source, "a cell that goes on and on", limit, remedy, row)


def _fault(source: Source, got: str, expected: str, remedy: str, row: int) -> InputProblem:
    return problem(
        "unreadable_file", source.file, got=got, expected=expected, remedy=remedy, row=str(row)
    )


def _first_undecodable(path: Path) -> int:
    with path.open("rb") as lines:
        for number, line in enumerate(lines, start=1):
            try:
                line.decode("utf-8")
            except UnicodeDecodeError:
                return number
    return 1
