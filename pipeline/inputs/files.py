"""Reading a table from csv, parquet or xlsx, rows numbered as the person sees them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path

import duckdb
import pandas as pd

from pipeline.core.findings import problem

ROW = "_row"
READERS = {".parquet": "read_parquet(?)", ".csv": "read_csv(?, all_varchar=true, header=true)"}
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
        The table. ``_row`` counts from the header as row 1, as a spreadsheet does.

    Raises:
        InputProblem: if the file is absent, of an unknown kind, unreadable or empty.
    """
    kind = source.path.suffix.lower()
    if not source.path.is_file():
        raise problem(
            "missing_file",
            source.path.name,
            column=f"inputs.{source.table}",
            got=f"no file at {source.path}",
            expected="an existing file",
            remedy="Correct the path; it counts from the folder of the study file that names it.",
        )
    if kind not in KINDS:
        raise problem(
            "unreadable_file",
            source.file,
            got=f"a file ending in '{kind}'",
            expected="one of " + ", ".join(KINDS),
            remedy="Save the table as one of these.",
        )
    try:
        raw = _excel(source) if kind == ".xlsx" else _query(source, kind, wanted, only)
    except (duckdb.Error, ValueError, KeyError, OSError) as fault:
        raise problem(
            "unreadable_file",
            source.file,
            got=str(fault).splitlines()[0],
            expected="a table with a header in its first row",
            remedy="Open the file, check the sheet and its first row, and save it again.",
        ) from None
    table = raw.rename(columns=_ours(source, list(raw.columns)))
    if table.empty and only is None:
        raise problem(
            "empty_table",
            source.file,
            got="no rows below the header",
            expected="at least one row",
            remedy="Export the table again with its rows.",
        )
    return table


def _ours(source: Source, names: list[str]) -> dict[str, str]:
    """File name -> our name: declared ones first, then the same but for case and spaces."""
    declared = {theirs: ours for ours, theirs in source.columns.items()}
    loose = {str(name): str(name).strip().lower().replace(" ", "_") for name in names}
    return {name: declared.get(name, loose[str(name)]) for name in names if name != ROW}


def _excel(source: Source) -> pd.DataFrame:
    with pd.ExcelFile(source.path, engine="openpyxl") as book:
        sheet = source.sheet or str(book.sheet_names[0])
        if sheet not in book.sheet_names:
            raise ValueError(f"no sheet '{sheet}'; it has {', '.join(map(str, book.sheet_names))}")
        table = book.parse(sheet, dtype=object, keep_default_na=False)
    table[ROW] = range(2, len(table) + 2)
    blank = table.drop(columns=ROW).map(lambda cell: cell is None or cell == "").all(axis=1)
    return table[~blank].reset_index(drop=True)


def _query(
    source: Source,
    kind: str,
    wanted: Sequence[str] | None,
    only: tuple[str, list[str]] | None,
) -> pd.DataFrame:
    with duckdb.connect() as base:
        base.execute("SET TimeZone = 'UTC'")
        shape = base.execute(f"SELECT * FROM {READERS[kind]} LIMIT 0", [str(source.path)])
        ours = _ours(source, [column[0] for column in shape.description or ()])
        kept = [name for name in ours if wanted is None or ours[name] in wanted]
        chosen = ", ".join(_quoted(name) for name in kept)
        query = (
            f"SELECT {chosen + ', ' if chosen else ''}{ROW} FROM (SELECT *, "
            f"row_number() OVER () + 1 AS {ROW} FROM {READERS[kind]})"
        )
        parameters: list[object] = [str(source.path)]
        by_our_name = {our: name for name, our in ours.items()}
        if only is not None and only[0] in by_our_name:
            query += (
                f" WHERE CAST({_quoted(by_our_name[only[0]])} AS VARCHAR) IN (SELECT unnest(?))"
            )
            parameters.append(only[1])
        return base.execute(query, parameters).df()


def _quoted(name: str) -> str:
    return '"' + name.replace('"', '""') + '"'
