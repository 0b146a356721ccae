"""Where a table is, and all that the study says about how it is written there."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import pandas as pd

ROW = "_row"
# In a workbook's cell: a formula whose result was never saved.
NOT_COMPUTED = "#FORMULA!"
KINDS = (".csv", ".parquet", ".xlsx", ".duckdb")
# What stands in the study in place of a file name.
POSTGRES = Path("postgresql")
# What one row of a long table is of, by table: the code, and the value beside it.
CODES = {"prices": "security", "benchmarks": "exchange", "rates": "currency"}


@dataclass(frozen=True, slots=True)
class Source:
    """Where one table is, and how to read it.

    Attributes:
        table: the table's name in the study.
        path: its file; :data:`POSTGRES` for one in a PostgreSQL data base.
        columns: our names -> the names in the file, for those that differ.
        sheet: sheet of a workbook; the first if ''.
        delimiter, encoding, decimal: of a csv file; detected, or UTF-8 and a point, if ''.
        header_row: the row of a csv file or a sheet that holds the names.
        relation, query: the table of a data base, or the query that makes it.
        connection: environment variable that holds the connection; '' for PostgreSQL's own.
        wide: whether each code has a column of its own; None if the study does not say.
        value: the column a wide table's cells belong to.
        factors: our columns -> what their cells are multiplied by.
        date_format: how this table alone writes dates; '' for as all tables do.
        copy: csv file a query's result was put in, once it was.
    """

    table: str
    path: Path
    columns: Mapping[str, str] = field(default_factory=dict)
    sheet: str = ""
    delimiter: str = ""
    encoding: str = ""
    decimal: str = ""
    header_row: int = 1
    relation: str = ""
    query: str = ""
    connection: str = ""
    wide: bool | None = None
    value: str = "close"
    factors: Mapping[str, float] = field(default_factory=dict)
    copy: Path | None = None
    date_format: str = ""

    @property
    def kind(self) -> str:
        """The ending of the file's name, in lower case; ``postgresql`` for the data base."""
        if self.copy is not None:
            return ".csv"
        return POSTGRES.name if self.is_postgres else self.path.suffix.lower()

    def dates(self, of_all: str) -> str:
        """How dates of this table are written, given how all tables write them."""
        return self.date_format or of_all

    @property
    def is_postgres(self) -> bool:
        """Whether the table is in a PostgreSQL data base."""
        return self.path == POSTGRES

    @property
    def at(self) -> Path:
        """The file to open."""
        return self.copy or self.path

    @property
    def file(self) -> str:
        """The file as named in findings."""
        inside = f"table {self.relation}" if self.relation else f"query of {self.table}"
        if self.is_postgres:
            return f"PostgreSQL, {inside}"
        if self.kind == ".duckdb":
            return f"{self.path.name}, {inside}"
        return self.path.name + (f", sheet {self.sheet}" if self.sheet else "")

    @property
    def code(self) -> str:
        """Our column that a wide table's headings belong to."""
        return CODES.get(self.table, "security")


@dataclass(frozen=True, slots=True, eq=False)
class Only:
    """The rows of a price table that a study touches.

    Attributes:
        codes: securities, sorted.
        spans: ``security, first, last`` (``datetime64[s]``), sorted, those of one security apart
            from each other; None for the whole history.
    """

    codes: tuple[str, ...]
    spans: pd.DataFrame | None = None

    def within(self, table: pd.DataFrame) -> pd.DataFrame:
        """The rows of a typed table that are of a code, in a span; rows without a date stay."""
        if self.spans is None or table.empty:
            return table.loc[table["security"].isin(self.codes)]
        keys = pd.Index(self.codes)
        code = keys.get_indexer(pd.Index(table["security"]))
        start = keys.get_indexer(pd.Index(self.spans["security"]))
        first, last = (_days(self.spans[name]) for name in ("first", "last"))
        day = _days(table["date"])
        # One number a code and day: the last span that starts at or before a row may hold it.
        at = np.searchsorted(start * DAYS + first, code * DAYS + day, side="right") - 1
        inside = (at >= 0) & (start[at] == code) & (day <= last[at])
        kept: pd.DataFrame = table[inside | table["date"].isna().to_numpy()]
        return kept

    def day_limits(self) -> tuple[str, str] | None:
        """The first and last date of all spans, ISO; None without spans."""
        if self.spans is None:
            return None
        return f"{self.spans['first'].min():%Y-%m-%d}", f"{self.spans['last'].max():%Y-%m-%d}"


DAYS = 1 << 20


def _days(dates: pd.Series) -> np.ndarray:
    """Days since 1970, below zero where there is no date."""
    days = dates.to_numpy().astype("datetime64[D]").astype(np.int64)
    known = (days > -DAYS // 4) & (days < DAYS // 2)
    return np.where(known, days + DAYS // 4, -1)


def joined_spans(spans: pd.DataFrame) -> pd.DataFrame:
    """Spans of one security that meet are made one.

    Args:
        spans: ``security, first, last``, in any order.
    """
    ordered = spans.sort_values(["security", "first"], kind="stable", ignore_index=True)
    new = ordered["security"] != ordered["security"].shift()
    so_far = ordered.groupby("security", sort=False)["last"].cummax()
    new |= ordered["first"] > so_far.shift() + pd.Timedelta(days=1)
    run = new.cumsum()
    joined = ordered.groupby(run, sort=False).agg(
        security=("security", "first"), first=("first", "first"), last=("last", "max")
    )
    return joined.reset_index(drop=True)


def only(codes: Iterable[str], spans: pd.DataFrame | None = None) -> Only:
    """The rows of those codes, within the spans if there are any."""
    named = tuple(sorted(set(codes)))
    return Only(named, None if spans is None else joined_spans(spans))
