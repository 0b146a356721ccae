"""Rows of the analyst's own tables that a check found wrong or doubtful."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Remark:
    """What is to be said of one row.

    Attributes:
        row: its number in the file, counted as a spreadsheet does.
        columns: the file's own names of the columns it is about; empty for the whole row.
        title: the rule in words; ``must`` whether it stops a run.
        found, expected, remedy: as in a finding.
    """

    row: int
    columns: tuple[str, ...]
    title: str
    must: bool
    found: str
    expected: str
    remedy: str


@dataclass(frozen=True, slots=True)
class OffendingTable:
    """One table's rows with a remark.

    Attributes:
        file: the table as named in findings.
        columns: its own column names in its own order.
        cells: row number -> its cells as they stand in the file, one a column.
        remarks: by row; a row may have several.
    """

    file: str
    columns: tuple[str, ...]
    cells: Mapping[int, tuple[object, ...]]
    remarks: tuple[Remark, ...]


@dataclass(frozen=True, slots=True)
class Offending:
    """All rows with a remark, and the remarks on tables as a whole: file, column, then words."""

    tables: tuple[OffendingTable, ...]
    whole: tuple[tuple[str, str, Remark], ...]

    @property
    def rows(self) -> int:
        """How many rows are shown."""
        return sum(len({remark.row for remark in table.remarks}) for table in self.tables)
