"""What a check says about bad input, and the one exception that carries it to the screen."""

from __future__ import annotations

import re
from collections.abc import Container, Iterable, Iterator, Mapping
from dataclasses import dataclass
from enum import StrEnum

import pandas as pd

SHOWN = 5

_ROWS = re.compile(r"(?<!and )\b(\d+)(?:-(\d+))?")
"""Rows and runs of rows in words such as ``12, 14-16 and 20 more``."""


class Severity(StrEnum):
    """How much a finding matters: an error stops the run, a warning travels to the report."""

    ERROR = "error"
    WARNING = "warning"
    NOTE = "note"


@dataclass(frozen=True, slots=True)
class Finding:
    """One thing a check found.

    ``rule`` is an entry of :mod:`pipeline.core.rules`; ``where`` parts are as the person sees
    them (file name, row number of her sheet counted from its header as row 1, column or key).
    ``rows`` are all of the row numbers, from which ``row`` names the first few.
    """

    rule: str
    severity: Severity
    file: str
    got: str
    expected: str
    remedy: str
    row: str = ""
    column: str = ""
    rows: tuple[int, ...] = ()

    def __post_init__(self) -> None:
        if self.rows and not self.row:
            object.__setattr__(self, "row", _first_few(self.rows))

    @property
    def where(self) -> str:
        """File, row and column in one phrase."""
        row_word = "rows" if any(mark in self.row for mark in ",–") else "row"
        parts = [self.file]
        if self.row:
            parts.append(f"{row_word} {self.row}")
        if self.column:
            parts.append(f"column or key '{self.column}'")
        return ", ".join(part for part in parts if part)


def _first_few(rows: tuple[int, ...]) -> str:
    """The first few row numbers, and how many more there are."""
    more = f" and {len(rows) - SHOWN:d} more" if len(rows) > SHOWN else ""
    return ", ".join(map(str, rows[:SHOWN])) + more


class InputProblem(Exception):
    """Input that cannot be worked with; holds every finding, shown at once.

    The command line prints the findings on one screen and leaves with exit code 2.
    """

    def __init__(self, findings: Iterable[Finding]):
        self.findings = tuple(findings)
        super().__init__("; ".join(f"{f.where}: {f.got}" for f in self.findings))


def problem(
    rule: str, file: str, *, got: str, expected: str, remedy: str, row: str = "", column: str = ""
) -> InputProblem:
    """An :class:`InputProblem` of one error finding."""
    return InputProblem(
        [Finding(rule, Severity.ERROR, file, got, expected, remedy, row=row, column=column)]
    )


def raise_errors(findings: Iterable[Finding]) -> None:
    """Raise :class:`InputProblem` with all errors among ``findings``, if there is one."""
    errors = [finding for finding in findings if finding.severity is Severity.ERROR]
    if errors:
        raise InputProblem(errors)


def touching(
    findings: Iterable[Finding], rows: Mapping[str, int], files: Container[str]
) -> Iterator[tuple[str, Finding]]:
    """(deal, finding) of each finding about the deal's own row of the deal list.

    ``rows`` holds each deal's row as the person sees it; ``files`` what the deal list is called.
    """
    for item in findings:
        if item.file not in files or not item.row:
            continue
        named = _ROWS.findall(item.row.replace("–", "-"))
        spans = [(int(first), int(last or first)) for first, last in named]
        for deal, row in rows.items():
            if any(first <= row <= last for first, last in spans):
                yield deal, item


def findings_frame(findings: Iterable[Finding]) -> pd.DataFrame:
    """One row a finding, columns as the fields of :class:`Finding`, in the order found."""
    columns = ["rule", "severity", "file", "row", "column", "got", "expected", "remedy"]
    rows = [[str(getattr(finding, name)) for name in columns] for finding in findings]
    return pd.DataFrame(rows, columns=columns, dtype="str")
