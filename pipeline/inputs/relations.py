"""A table as something DuckDB can select from: csv, parquet or a table of a data base file.

What a study does not need is left where it is: columns, securities and dates are asked for in the
one statement that reads.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass

import duckdb
import numpy as np
import pandas as pd

from pipeline.inputs.csv_text import as_utf8, delimiter
from pipeline.inputs.source import ROW, Only, Source

# A date written in another form than the study's cannot be compared with a span; its row is read,
# so that what is wrong with it can be said.
FORMATS = {"%d", "%m", "%Y"}


@dataclass(frozen=True, slots=True)
class Relation:
    """A view of an open connection.

    Attributes:
        base: the connection.
        kinds: column of the file -> its type in DuckDB, in the file's order.
        row: the expression that numbers its rows as the person sees them.
        view: its name.
    """

    base: duckdb.DuckDBPyConnection
    kinds: Mapping[str, str]
    row: str
    view: str = "cells"


@contextmanager
def opened(source: Source) -> Iterator[Relation]:
    """The table's cells as a view, nothing of it read yet.

    Raises:
        duckdb.Error: if it is no table of its kind.
        InputProblem: what is wrong with a csv file's bytes.
    """
    with duckdb.connect() as base:
        base.execute("SET TimeZone = 'UTC'")
        base.execute("SET autoinstall_known_extensions = false")
        base.execute("SET autoload_known_extensions = false")
        if source.kind == ".csv":
            with as_utf8(source) as path:
                mark = delimiter(source, path)
                yield _relation(base, _csv(str(path), mark, source), _numbered(source))
        elif source.kind == ".parquet":
            made = f"read_parquet({literal(str(source.at))}, file_row_number = true)"
            yield _relation(base, made, "file_row_number + 2", hidden="file_row_number")
        else:
            base.execute(f"ATTACH {literal(str(source.at))} AS given (READ_ONLY)")
            base.execute("USE given")
            # A view of somebody's data base could otherwise read any other file of this machine.
            base.execute("SET enable_external_access = false")
            base.execute("SET lock_configuration = true")
            yield _relation(base, _inside(source), _numbered(source))


def _relation(base: duckdb.DuckDBPyConnection, made: str, row: str, hidden: str = "") -> Relation:
    base.execute(f"CREATE TEMP VIEW cells AS SELECT * FROM {made}")
    shape = base.execute("DESCRIBE cells").fetchall()
    return Relation(base, {name: kind for name, kind, *_ in shape if name != hidden}, row)


def _csv(path: str, mark: str, source: Source) -> str:
    # Left to itself the reader would take an open quotation mark for a letter.
    options = """all_varchar = true, header = true, quote = '"', escape = '"'"""
    if mark:
        options += f", delim = {literal(mark)}"
    if source.header_row > 1:
        options += f", skip = {source.header_row - 1}"
    return f"read_csv({literal(path)}, {options})"


def _numbered(source: Source) -> str:
    return f"row_number() OVER () + {source.header_row}"


def _inside(source: Source) -> str:
    """A table of the data base, or a query in brackets, which makes it the only statement."""
    if source.query:
        return f"(\n{source.query.strip().rstrip(';')}\n)"
    return ".".join(quoted(part) for part in source.relation.split("."))


def header_of(source: Source) -> list[str]:
    """The names in the first row, before a reader makes repeated ones differ."""
    if source.kind != ".csv":
        with opened(source) as relation:
            return list(relation.kinds)
    with duckdb.connect() as base, as_utf8(source, whole=False) as path:
        made = _csv(str(path), delimiter(source, path), source)
        made = made.replace("header = true", "header = false")
        names = base.execute(f"SELECT * FROM {made} LIMIT 1").fetchone() or ()
        return [str(name) for name in names if name is not None]


def code_of(name: str) -> str:
    """A column's codes without spaces around; compare them with :func:`spellings`."""
    return f"trim(CAST({quoted(name)} AS VARCHAR))"


def spellings(codes: Sequence[str]) -> pd.DataFrame:
    """wanted_code, wanted_number: each code by its place; a whole number 5 as 5.0 besides.

    The contract reads both as one; so turned over, no cell has to be rewritten to be compared.
    """
    number = np.arange(len(codes), dtype=np.int32)
    whole = [at for at, code in enumerate(codes) if code.isascii() and code.isdigit()]
    return pd.DataFrame(
        {
            "wanted_code": [*codes, *(f"{codes[at]}.0" for at in whole)],
            "wanted_number": np.concatenate([number, number[whole]]),
        }
    )


def day_of(name: str, kind: str, date_format: str) -> str:
    """A column's dates, NULL where a cell holds none that can be told here."""
    cell = quoted(name)
    if kind == "DATE" or kind.startswith("TIMESTAMP"):
        return f"CAST({cell} AS DATE)"
    if kind != "VARCHAR":
        return "CAST(NULL AS DATE)"
    parts = {date_format[at : at + 2] for at, mark in enumerate(date_format) if mark == "%"}
    plain = f"coalesce(TRY_CAST({cell} AS DATE), TRY_CAST(left(trim({cell}), 10) AS DATE))"
    if parts != FORMATS:
        return plain if not date_format else "CAST(NULL AS DATE)"
    return f"coalesce(CAST(try_strptime({cell}, {literal(date_format)}) AS DATE), {plain})"


def touched(relation: Relation, code: str, day: str, only: Only) -> str:
    """The condition that keeps the rows of ``only``; registers what it compares with.

    Its columns have names that no table's column has: one would be compared with itself.
    ``code`` and ``day`` are expressions; a row of a wanted security without a date stays.
    """
    codes = spellings(only.codes)
    relation.base.register("wanted_rows", codes)
    if only.spans is None:
        return f"{code} IN (SELECT wanted_code FROM wanted_rows)"
    relation.base.register("wanted_rows", codes_with_spans(codes, only))
    return (
        f"EXISTS (SELECT 1 FROM wanted_rows WHERE wanted_code = {code} AND ({day} IS NULL OR "
        f"{day} BETWEEN wanted_first AND wanted_last))"
    )


def codes_with_spans(codes: pd.DataFrame, only: Only) -> pd.DataFrame:
    """wanted_code, wanted_first, wanted_last: every spelling of a code with each of its spans."""
    assert only.spans is not None
    named = codes.assign(security=np.asarray(only.codes, dtype=object)[codes["wanted_number"]])
    spans = only.spans.rename(columns={"first": "wanted_first", "last": "wanted_last"})
    return named.merge(spans, on="security")[["wanted_code", "wanted_first", "wanted_last"]]


def select(relation: Relation, names: list[str], condition: str = "") -> str:
    """The statement that reads columns and row numbers, of the rows that meet a condition.

    Rows are numbered before any is left out.
    """
    chosen = "".join(f"{quoted(name)}, " for name in names)
    where = f" WHERE {condition}" if condition else ""
    return (
        f"SELECT {chosen}{ROW} FROM (SELECT *, {relation.row} AS {ROW} FROM {relation.view}){where}"
    )


def quoted(name: str) -> str:
    """A name as SQL writes it."""
    return '"' + name.replace('"', '""') + '"'


def literal(text: str) -> str:
    """A text as SQL writes it."""
    return "'" + text.replace("'", "''") + "'"
