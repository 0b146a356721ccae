"""Why a csv file is no table, said by row: readers only say that it is none."""

from __future__ import annotations

import csv
from pathlib import Path

from pipeline.core.findings import InputProblem, problem

MARKS = ",;\t|"


def csv_fault(path: Path, file: str) -> InputProblem | None:
    """The first row that is not UTF-8, or that has more or fewer cells than the header.

    Args:
        path: the csv file.
        file: its name in findings.

    Returns:
        The problem to raise, or None if neither is found. Rows count from the header as row 1,
        blank ones included.
    """
    try:
        with path.open(newline="", encoding="utf-8-sig") as text:
            header = text.readline()
            mark = max(MARKS, key=header.count)
            width = len(next(csv.reader([header], delimiter=mark), []))
            for number, row in enumerate(csv.reader(text, delimiter=mark), start=2):
                if row and len(row) != width:
                    return problem(
                        "unreadable_file",
                        file,
                        got=f"{len(row)} cells",
                        expected=f"{width} cells, as the header has",
                        remedy=f"Complete the row, or put text that holds a '{mark}' in quotes.",
                        row=str(number),
                    )
    except UnicodeDecodeError:
        return problem(
            "unreadable_file",
            file,
            got="a character of another encoding",
            expected="text in UTF-8",
            remedy="Save the table again as CSV in UTF-8.",
            row=str(_first_undecodable(path)),
        )
    except csv.Error:
        return None
    return None


def _first_undecodable(path: Path) -> int:
    with path.open("rb") as lines:
        for number, line in enumerate(lines, start=1):
            try:
                line.decode("utf-8")
            except UnicodeDecodeError:
                return number
    return 1
