"""Tables of a PostgreSQL data base: a query, its result put in a csv file of its own.

The connection is taken from the environment and never written anywhere. The transaction only
reads. What the events do not touch stays in the data base: the query is joined with the securities
and dates there.
"""

from __future__ import annotations

import hashlib
import os
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

from pipeline.core.findings import InputProblem, problem
from pipeline.inputs.source import Only, Source

NUMBERS = {"int2", "int4", "int8", "numeric", "float4", "float8", "oid"}
INSTANT = """to_char({} AT TIME ZONE 'UTC', 'YYYY-MM-DD"T"HH24:MI:SS.US"Z"')"""
SETTINGS = (
    "SET LOCAL DateStyle = 'ISO'", "SET LOCAL TimeZone = 'UTC'", "SET LOCAL extra_float_digits = 1",
)  # fmt: skip
# What a refusal to connect says, in words that hold no name, host or password.
REFUSALS = {
    "28": "the server refused the user or the password",
    "3D": "the server has no such data base",
    "53": "the server takes no more connections",
    "57": "the server is starting up or shutting down",
}
WORDS = {
    "password": REFUSALS["28"], "authentication": REFUSALS["28"], "role": REFUSALS["28"],
    "pg_hba": REFUSALS["28"], "database": REFUSALS["3D"],
}  # fmt: skip


@dataclass(slots=True)
class Fetcher:
    """Brings the results of queries into a folder.

    Attributes:
        folder: where the files go.
        digests: table -> SHA-256 of the result, for those fetched.
    """

    folder: Path
    digests: dict[str, str] = field(default_factory=dict)

    def at_hand(self, source: Source, only: Only | None = None) -> Source:
        """The source itself, or one whose query has been answered.

        Raises:
            InputProblem: ``no_database`` if the data base cannot be reached, ``unreadable_file``
                if it refuses the query.
        """
        if not source.is_postgres:
            return source
        target = self.folder / f"{source.table}.csv"
        fetch(source, target, only)
        with target.open("rb") as file:
            self.digests[source.table] = hashlib.file_digest(file, "sha256").hexdigest()
        return replace(source, copy=target, delimiter=",", encoding="", header_row=1)


@contextmanager
def fetching() -> Iterator[Fetcher]:
    """A folder for the results, which is gone with the context."""
    with TemporaryDirectory(prefix="dealwake_") as folder:
        yield Fetcher(Path(folder))


def fetch(source: Source, target: Path, only: Only | None) -> None:
    """Write the rows of a query, or those of them that are touched, as csv in UTF-8.

    Dates are ISO 8601, instants in UTC, numbers as short as they can be read back exactly.

    Raises:
        InputProblem: as :meth:`Fetcher.at_hand`.
    """
    psycopg = _library(source)
    with _connected(source, psycopg) as link, target.open("wb") as file:
        try:
            with link.cursor() as cursor:
                for setting in SETTINGS:
                    cursor.execute(setting)
                kinds = _shape(cursor, source)
                with cursor.copy(_statement(source, kinds, only)) as rows:
                    for block in rows:
                        file.write(block)
        except psycopg.Error as fault:
            raise _refused(source, fault) from None


def _library(source: Source) -> Any:
    try:
        import psycopg
    except ImportError:
        raise problem(
            "no_database",
            source.file,
            got="no library for PostgreSQL",
            expected="the package psycopg",
            remedy="Install it: pip install 'dealwake[postgres]'.",
            column=f"inputs.{source.table}",
        ) from None
    return psycopg


@contextmanager
def _connected(source: Source, psycopg: Any) -> Iterator[Any]:
    """A transaction that only reads and sees one state of the data base."""
    name = source.connection
    if name and not os.environ.get(name):
        raise problem(
            "no_database",
            source.file,
            got=f"no environment variable {name}",
            expected="the connection to the data base in it",
            remedy="Set it before you start, or correct inputs.connection.",
            column="inputs.connection",
        )
    try:
        link = psycopg.connect(os.environ[name] if name else "", client_encoding="utf8")
    except psycopg.Error as fault:
        raise _no_connection(source, fault) from None
    with link:
        link.isolation_level = psycopg.IsolationLevel.REPEATABLE_READ
        link.read_only = True
        try:
            yield link
        finally:
            link.rollback()


def _no_connection(source: Source, fault: Any) -> InputProblem:
    """The refusal in our own words: those of the server may hold the user, the host or worse."""
    said = str(fault).lower() if "fatal" in str(fault).lower() else ""
    reason = REFUSALS.get(str(fault.sqlstate or "")[:2]) or next(
        (words for word, words in WORDS.items() if word in said), "the server was not reached"
    )
    return problem(
        "no_database",
        source.file,
        got=f"no connection: {reason}",
        expected="a connection by "
        + (
            f"the variable {source.connection}" if source.connection else "PGHOST, PGUSER and so on"
        ),
        remedy="Try the same connection with psql; ask who keeps the data base.",
        column="inputs.connection" if source.connection else f"inputs.{source.table}",
    )


def _refused(source: Source, fault: Any) -> InputProblem:
    key = "table" if source.relation else "query"
    return problem(
        "unreadable_file",
        source.file,
        got=(fault.diag.message_primary or "the query was broken off")[:300],
        expected="a query that only reads, or the name of a table",
        remedy=f"Correct inputs.source.{source.table}.{key}; try it with psql.",
        column=f"inputs.source.{source.table}.{key}",
    )


def _made(source: Source) -> Any:
    """The table, or the query in brackets."""
    from psycopg import sql

    if source.relation:
        return sql.Identifier(*source.relation.split("."))
    return sql.SQL("(\n{}\n)").format(sql.SQL(source.query.strip().rstrip(";")))


def _shape(cursor: Any, source: Source) -> dict[str, str]:
    """Column -> its type.

    The statement is prepared, which a server refuses for several statements in one text.
    """
    from psycopg import sql

    shape = sql.SQL("SELECT * FROM {} AS given LIMIT 0").format(_made(source))
    cursor.execute(shape, prepare=True)
    types = cursor.connection.adapters.types
    return {
        column.name: getattr(types.get(column.type_code), "name", "text")
        for column in cursor.description
    }


def _statement(source: Source, kinds: dict[str, str], only: Only | None) -> Any:
    from psycopg import sql

    names = [*kinds]
    ours = _ours(source, names)
    condition, order = sql.SQL(""), sql.SQL("")
    if only is not None and source.wide:
        dates = [name for name in names if ours[name] == "date"]
        names = [*dates, *(name for name in names if name.strip() in only.codes)] or names
    elif only is not None and "security" in ours.values():
        condition, order = _touched(ours, kinds, only)
    cells = sql.SQL(", ").join(_cell(name, kinds[name]) for name in names)
    return sql.SQL("COPY (SELECT {} FROM {} AS given{}{}) TO STDOUT (FORMAT csv, HEADER)").format(
        cells, _made(source), condition, order
    )


def _ours(source: Source, names: list[str]) -> dict[str, str]:
    """Column -> our name, as a file's would be read."""
    declared = {theirs: ours for ours, theirs in source.columns.items()}
    return {name: declared.get(name, name.strip().lower().replace(" ", "_")) for name in names}


def _cell(name: str, kind: str) -> Any:
    from psycopg import sql

    column = sql.Identifier("given", name)
    if kind == "timestamptz":
        made: Any = sql.SQL(INSTANT).format(column)
    elif kind == "bool":
        made = sql.SQL("CASE {} WHEN true THEN 'true' WHEN false THEN 'false' END").format(column)
    else:
        made = column
    return sql.SQL("{} AS {}").format(made, sql.Identifier(name))


def _touched(ours: dict[str, str], kinds: dict[str, str], only: Only) -> tuple[Any, Any]:
    """The condition and the order of the rows that are touched.

    Codes and dates are compared as they are stored wherever they can be, so that an index serves.
    """
    from psycopg import sql

    theirs = {our: name for name, our in ours.items()}
    security = sql.Identifier("given", theirs["security"])
    number = kinds[theirs["security"]] in NUMBERS
    code = sql.SQL("trim_scale({}::numeric)::text").format(security) if number else security
    spans = only.spans
    day = sql.Identifier("given", theirs["date"]) if "date" in theirs else None
    if spans is None or day is None:
        wanted = sql.SQL("unnest({}::text[]) AS wanted (code)").format(
            sql.Literal(list(only.codes))
        )
        within: Any = sql.SQL("true")
    else:
        wanted = sql.SQL(
            "unnest({}::text[], {}::date[], {}::date[]) AS wanted (code, first, last)"
        ).format(
            sql.Literal([str(name) for name in spans["security"]]),
            *(sql.Literal([f"{day:%Y-%m-%d}" for day in spans[end]]) for end in ("first", "last")),
        )
        within = _within(day, kinds[theirs["date"]])
    condition = sql.SQL(" WHERE EXISTS (SELECT 1 FROM {} WHERE {} = wanted.code AND {})").format(
        wanted, code, within
    )
    order = [sql.SQL("{}").format(name) for name in (security, day) if name is not None]
    return condition, sql.SQL(" ORDER BY {}").format(sql.SQL(", ").join(order))


def _within(day: Any, kind: str) -> Any:
    """Whether a date is in a span; one that cannot be told is kept."""
    from psycopg import sql

    if kind == "date":
        return sql.SQL("({0} IS NULL OR {0} BETWEEN wanted.first AND wanted.last)").format(day)
    if kind in ("timestamp", "timestamptz"):
        return sql.SQL("({0} IS NULL OR ({0} >= wanted.first AND {0} < wanted.last + 1))").format(
            day
        )
    if kind in ("text", "varchar", "bpchar"):
        return sql.SQL(
            r"({0} IS NULL OR {0} !~ '^\d{{4}}-\d\d-\d\d' OR left({0}, 10) "
            "BETWEEN wanted.first::text AND wanted.last::text)"
        ).format(day)
    return sql.SQL("true")
