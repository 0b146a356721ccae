"""Reading a table from csv, parquet or xlsx, rows numbered as the person sees them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from zipfile import BadZipFile

import duckdb
import pandas as pd

from pipeline.core.findings import problem
from pipeline.inputs.faults import MARKS, csv_fault

ROW = "_row"
READERS = {".parquet": "read_parquet(?)", ".csv": "read_csv(?, all_varchar=true, header=true)"}
FIRST_ROW = "SELECT * FROM read_csv(?, all_varchar=true, header=false) LIMIT 1"
KINDS = (".csv", ".parquet", ".xlsx")


@dataclass(frozen=True, slots=True)
class Source:
    """Where one table is.

    ``columns`` maps our names to the names in the file, for those that differ.
    """

    table: str
    path: Path
    columns: Mapping[str, str] = field(default_factory=dict)
    sheet: str = ""

    @property
    def kind(self) -> str:
        """The ending of the file's name, in lower case."""
        return self.path.suffix.lower()

    @property
    def file(self) -> str:
        """The file as named in findings."""
        return self.path.name + (f", sheet {self.sheet}" if self.sheet else "")


def read_table(
    source: Source, wanted: Sequence[str] | None = None, only: tuple[str, list[str]] | None = None
) -> pd.DataFrame:
    """The raw cells of a table under our column names, plus ``_row``.

    Args:
        source: the file.
        wanted: our names of the columns to read; all if None. Names the file lacks are left out,
            the contract reports them.
        only: one of our columns and the values to keep (parquet and csv only read those rows).

    Returns:
        The table. ``_row`` counts from the header as row 1, as a spreadsheet does; lines above
        the header of a csv, and its blank lines, do not count.

    Raises:
        InputProblem: if the file is absent, of an unknown kind, unreadable or empty.
    """
    _refuse_path(source)
    raw = _raw(source, wanted, only)
    ours = _ours(source, list(raw.columns))
    table = raw[[*ours, ROW]].rename(columns=ours)
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
    if not source.path.is_file():
        raise problem(
            "missing_file",
            source.path.name,
            column=f"inputs.{source.table}",
            got=f"no file at {source.path}",
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


def _raw(
    source: Source, wanted: Sequence[str] | None, only: tuple[str, list[str]] | None
) -> pd.DataFrame:
    """The cells under the file's own names; what is wrong with a csv is said by row."""
    is_csv = source.kind == ".csv"
    try:
        _refuse_repeats(source, _header(source))
        raw = _excel(source) if source.kind == ".xlsx" else _query(source, wanted, only)
    except (duckdb.Error, BadZipFile, ValueError, KeyError, OSError) as fault:
        found = csv_fault(source.path, source.file) if is_csv else None
        raise found or problem(
            "unreadable_file",
            source.file,
            got=str(fault).splitlines()[0],
            expected="a table with a header in its first row",
            remedy="Open the file, check the sheet and its first row, and save it again.",
        ) from None
    if is_csv and (raw.empty or _one_cell_a_row(raw)):
        found = csv_fault(source.path, source.file)
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
    ours = {name: declared.get(name, _loose(name)) for name in names if name != ROW}
    return {
        name: our for name, our in ours.items() if name in declared or our not in declared.values()
    }


def _declared(source: Source, names: list[str]) -> dict[str, str]:
    """File name -> our name for declared columns, case and spaces aside where that is unique."""
    found: dict[str, str] = {}
    for ours, theirs in source.columns.items():
        alike = [name for name in names if name != ROW and _loose(name) == _loose(theirs)]
        if theirs in names:
            found[theirs] = ours
        elif len(alike) == 1:
            found[alike[0]] = ours
    return found


def _loose(name: str) -> str:
    return str(name).strip().lower().replace(" ", "_")


def _header(source: Source) -> list[str]:
    """The names in the first row, before a reader makes repeated ones differ."""
    if source.kind == ".xlsx":
        with pd.ExcelFile(source.path, engine="openpyxl") as book:
            sheet = _sheet(source, book)
            first = pd.read_excel(book, sheet_name=sheet, header=None, nrows=1, dtype=object)
        return [str(name) for name in first.to_numpy().ravel() if pd.notna(name)]
    with duckdb.connect() as base:
        if source.kind == ".csv":
            base.execute(FIRST_ROW, [str(source.path)])
            return [str(name) for name in base.fetchone() or () if name is not None]
        shape = base.execute(f"SELECT * FROM {READERS[source.kind]} LIMIT 0", [str(source.path)])
        return [column[0] for column in shape.description or ()]


def _refuse_repeats(source: Source, header: list[str]) -> None:
    """Refuse two columns that are one but for case and spaces, unless one was declared."""
    declared = {theirs: ours for ours, theirs in source.columns.items()}
    alike: dict[str, list[str]] = {}
    for name in header:
        alike.setdefault(declared.get(name, _loose(name)), []).append(name)
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


def _sheet(source: Source, book: pd.ExcelFile) -> str:
    sheet = source.sheet or str(book.sheet_names[0])
    if sheet not in book.sheet_names:
        raise ValueError(f"no sheet '{sheet}'; it has {', '.join(map(str, book.sheet_names))}")
    return sheet


def _excel(source: Source) -> pd.DataFrame:
    with pd.ExcelFile(source.path, engine="openpyxl") as book:
        sheet = _sheet(source, book)
        table = pd.read_excel(book, sheet_name=sheet, dtype=object, keep_default_na=False)
        if table.isna().any(axis=None):  # the reader turns every error cell into NaN
            written = pd.DataFrame(book.book[sheet].iter_rows(min_row=2, values_only=True))
            written = written.iloc[: len(table), : table.shape[1]].set_axis(table.columns, axis=1)
            table = table.where(table.notna(), written)
    table[ROW] = range(2, len(table) + 2)
    return table


def _query(
    source: Source,
    wanted: Sequence[str] | None,
    only: tuple[str, list[str]] | None,
) -> pd.DataFrame:
    with duckdb.connect() as base:
        base.execute("SET TimeZone = 'UTC'")
        shape = base.execute(f"SELECT * FROM {READERS[source.kind]} LIMIT 0", [str(source.path)])
        ours = _ours(source, [column[0] for column in shape.description or ()])
        kept = [name for name in ours if wanted is None or ours[name] in wanted]
        chosen = ", ".join(_quoted(name) for name in kept)
        query = (
            f"SELECT {chosen + ', ' if chosen else ''}{ROW} FROM (SELECT *, "
            f"row_number() OVER () + 1 AS {ROW} FROM {READERS[source.kind]})"
        )
        parameters: list[object] = [str(source.path)]
        by_our_name = {our: name for name, our in ours.items()}
        if only is not None and only[0] in by_our_name:
            # Codes compare as the contract reads them: without spaces around, 5.0 as 5.
            code = f"trim(CAST({_quoted(by_our_name[only[0]])} AS VARCHAR))"
            query += f" WHERE regexp_replace({code}, '^(\\d+)\\.0$', '\\1') IN (SELECT unnest(?))"
            parameters.append(only[1])
        return base.execute(query, parameters).df()


def _quoted(name: str) -> str:
    return '"' + name.replace('"', '""') + '"'
