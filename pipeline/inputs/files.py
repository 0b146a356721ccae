"""Reading a table from any source, rows numbered as the person sees them."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path
from tempfile import gettempdir
from zipfile import BadZipFile

import duckdb
import pandas as pd

from pipeline.core.disk import FULL, disk_refusal
from pipeline.core.findings import Finding, InputProblem, problem
from pipeline.inputs.faults import MARKS, csv_fault
from pipeline.inputs.plain import plain_rows
from pipeline.inputs.relations import (
    Relation,
    code_of,
    day_of,
    header_of,
    opened,
    select,
    touched,
)
from pipeline.inputs.source import KINDS, ROW, Only, Source
from pipeline.inputs.wide import columns_of_codes, laid_long, melted, recognised
from pipeline.inputs.workbook import read_sheet, sheet_header

__all__ = [
    "ROW",
    "Only",
    "Source",
    "loose_name",
    "names_of",
    "read_plain",
    "read_table",
    "seen_layout",
]

LONGEST_MESSAGE = 300
REMEDY = {
    ".xlsx": "Open the file, check the sheet and its first row, and save it again.",
    ".duckdb": "Check the name of the table, or the query, in inputs.source.",
}
UNREADABLE = (duckdb.Error, BadZipFile, ValueError, KeyError, OSError)


def read_table(
    source: Source,
    wanted: Sequence[str] | None = None,
    only: Only | None = None,
    date_format: str = "",
) -> pd.DataFrame:
    """The raw cells of a table under our column names, plus ``_row``.

    Args:
        source: the file.
        wanted: our names of the columns to read; all if None. Names the file lacks are left out,
            the contract reports them.
        only: the securities and dates to keep; all but workbooks read those rows alone.
        date_format: the study's, to compare dates written in it.

    Returns:
        The table. ``_row`` counts from the header as row 1, as a spreadsheet does; lines above
        the header of a csv, and its blank lines, do not count.

    Raises:
        InputProblem: if the file is absent, of an unknown kind, unreadable or empty.
    """
    _refuse_path(source)
    raw = _raw(source, wanted, only, date_format)
    ours = _ours(source, list(raw.columns)) if not source.wide else {}
    table = raw[[*ours, ROW]].rename(columns=ours) if ours else raw
    if wanted is None:
        table = table[~_blank(table)].reset_index(drop=True)
    if table.empty and only is None:
        raise problem(
            "empty_table",
            source.file,
            got="no rows below the header",
            expected="at least one row",
            remedy="Export the table again with its rows.",
        )
    return table


def _blank(table: pd.DataFrame) -> pd.Series:
    """Rows without a single filled cell, as spreadsheets leave below a table."""
    cells = table.drop(columns=ROW)
    return (cells.isna() | cells.map(lambda cell: cell == "")).all(axis=1)


def _refuse_path(source: Source) -> None:
    if not source.at.is_file():
        raise problem(
            "missing_file",
            source.path.name,
            column=f"inputs.{source.table}",
            got=f"no file at {source.at}" + _alike(source),
            expected="an existing file",
            remedy="Correct the path; it counts from the folder of the study file that names it.",
        )
    if source.kind not in KINDS:
        raise problem(
            "unreadable_file",
            source.file,
            got=f"a file ending in '{source.kind}'",
            expected="one of " + ", ".join(KINDS),
            remedy="Save the table as one of these.",
        )


def _alike(source: Source) -> str:
    """A file that differs by capital letters alone, which some systems take for the same."""
    folder, name = source.at.parent, source.at.name.casefold()
    known = sorted(path.name for path in folder.iterdir()) if folder.is_dir() else []
    near = [other for other in known if other.casefold() == name]
    return f"; there is '{near[0]}', written otherwise" if near else ""


def _raw(
    source: Source, wanted: Sequence[str] | None, only: Only | None, date_format: str
) -> pd.DataFrame:
    """The cells under the file's own names; what is wrong with a csv is said by row."""
    is_csv = source.kind == ".csv"
    try:
        _refuse_repeats(source, names_of(source))
        if source.kind == ".xlsx":
            raw = _sheet_cells(source, only)
        else:
            raw = _query(source, wanted, only, date_format)
    except UNREADABLE as fault:
        if isinstance(fault, OSError) and fault.errno in FULL:
            raise disk_refusal(fault, Path(gettempdir()), key="TMPDIR") from fault
        found = csv_fault(source) if is_csv else None
        raise found or problem(
            "unreadable_file",
            source.file,
            got=(str(fault).splitlines() or [type(fault).__name__])[0][:LONGEST_MESSAGE],
            expected="a table with a header in its first row",
            remedy=REMEDY.get(source.kind, "Open the file, look at its header, and save it again."),
        ) from None
    if is_csv and (raw.empty or _one_cell_a_row(raw)):
        found = csv_fault(source)
        if found is not None:
            raise found
    return raw


def _one_cell_a_row(raw: pd.DataFrame) -> bool:
    """Whether no mark fitted all rows, so that each became one cell."""
    names = [name for name in raw.columns if name != ROW]
    return len(names) == 1 and any(mark in names[0] for mark in MARKS)


def _ours(source: Source, names: list[str]) -> dict[str, str]:
    """File name -> our name: declared ones first, then the same but for case and spaces.

    A column whose own name was declared to be another's is left out.
    """
    declared = _declared(source, names)
    ours = {name: declared.get(name, loose_name(name)) for name in names if name != ROW}
    return {
        name: our for name, our in ours.items() if name in declared or our not in declared.values()
    }


def _declared(source: Source, names: list[str]) -> dict[str, str]:
    """File name -> our name for declared columns, case and spaces aside where that is unique."""
    found: dict[str, str] = {}
    for ours, theirs in source.columns.items():
        alike = [name for name in names if name != ROW and loose_name(name) == loose_name(theirs)]
        if theirs in names:
            found[theirs] = ours
        elif len(alike) == 1:
            found[alike[0]] = ours
    return found


def loose_name(name: str) -> str:
    """A column's name as it is compared: lower case, spaces as underscores."""
    return str(name).strip().lower().replace(" ", "_")


def names_of(source: Source) -> list[str]:
    """The names in the header, as they stand there."""
    return sheet_header(source) if source.kind == ".xlsx" else header_of(source)


def _refuse_repeats(source: Source, header: list[str]) -> None:
    """Refuse two columns that are one but for case and spaces, unless one was declared."""
    declared = {theirs: ours for ours, theirs in source.columns.items()}
    alike: dict[str, list[str]] = {}
    for name in header:
        ours = name if source.wide else declared.get(name, loose_name(name))
        alike.setdefault(ours, []).append(name)
    for ours, names in alike.items():
        chosen = [name for name in names if name == source.columns.get(ours)] or names
        if len(chosen) > 1:
            raise problem(
                "ambiguous_column",
                source.file,
                column=ours,
                got="columns " + " and ".join(f"'{name}'" for name in chosen),
                expected=f"one column that reads '{ours}', whatever its case and spaces",
                remedy="Rename or delete one of them.",
            )


def _sheet_cells(source: Source, only: Only | None) -> pd.DataFrame:
    table = read_sheet(source)
    if not source.wide:
        return table
    date, codes = _laid_out(source, [str(name) for name in table.columns], only)
    return melted(table, source, date, codes)


def _query(
    source: Source, wanted: Sequence[str] | None, only: Only | None, date_format: str
) -> pd.DataFrame:
    with _laid(source, only) as (relation, ours):
        kept = [name for name in ours if wanted is None or ours[name] in wanted]
        condition = _touched(relation, ours, only, date_format)
        return relation.base.execute(select(relation, kept, condition)).df()


def read_plain(
    source: Source, value: str, only: Only | None, date_format: str
) -> pd.DataFrame | None:
    """The typed rows of a price table if all is written plainly; see :mod:`pipeline.inputs.plain`.

    Raises:
        InputProblem: as :func:`read_table` does.
    """
    if only is None or source.kind == ".xlsx" or source.decimal or source.factors:
        return None
    _refuse_path(source)
    try:
        _refuse_repeats(source, names_of(source))
        with _laid(source, only) as (relation, ours):
            return plain_rows(relation, ours, value, only, date_format)
    except UNREADABLE:
        return None


@contextmanager
def _laid(source: Source, only: Only | None) -> Iterator[tuple[Relation, dict[str, str]]]:
    """The open table with a row a code and date, and its columns -> our names."""
    with opened(source) as relation:
        if source.wide:
            date, codes = _laid_out(source, list(relation.kinds), only)
            relation = laid_long(relation, source, date, codes)
            yield relation, {name: name for name in relation.kinds}
        else:
            yield relation, _ours(source, list(relation.kinds))


def _touched(
    relation: Relation, ours: Mapping[str, str], only: Only | None, date_format: str
) -> str:
    """The condition on the rows that a study touches; '' where it cannot be put."""
    theirs = {our: name for name, our in ours.items()}
    if only is None or "security" not in theirs:
        return ""
    code = code_of(theirs["security"])
    day = "CAST(NULL AS DATE)"
    if "date" in theirs:
        day = day_of(theirs["date"], relation.kinds[theirs["date"]], date_format)
    return touched(relation, code, day, only)


def _laid_out(source: Source, names: list[str], only: Only | None) -> tuple[str, dict[str, str]]:
    """The column of dates of a wide table, and its columns of codes."""
    ours = _ours(source, names)
    dates = [name for name, our in ours.items() if our == "date"]
    if not dates:
        raise problem(
            "missing_column",
            source.file,
            column=source.columns.get("date", "date"),
            got="no such column",
            expected=f"a column of dates beside one column a {source.code}",
            remedy=f"Add it, or write [inputs.columns.{source.table}] date = 'your name'.",
        )
    return dates[0], columns_of_codes(names, dates[0], only)


def seen_layout(source: Source, only: Only | None) -> tuple[Source, list[Finding]]:
    """The source, taken for a wide table if it looks like one, and the note that says so.

    That is a table without a column of codes, whose other columns are called as codes are that
    the study wants.
    """
    if source.wide is not None or only is None or not source.at.is_file():
        return source, []
    try:
        names = names_of(source)
    except (*UNREADABLE, InputProblem):
        return source, []  # what is wrong with it is said where it is read
    ours = _ours(source, names)
    dates = [name for name, our in ours.items() if our == "date"]
    if not dates or source.code in ours.values() or source.value in ours.values():
        return source, []
    codes = columns_of_codes(names, dates[0], only)
    if not codes:
        return source, []
    return replace(source, wide=True), [recognised(source, codes)]
