"""Prices read in one statement: the fast way for a table without any doubt in it.

The statement joins securities and dates, turns text into numbers, and gives each security a whole
number in the place of its code. It refuses whatever is not written in the plainest way, and then
the table is read cell by cell, so that what is wrong can be said by row.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import duckdb
import numpy as np
import pandas as pd

from pipeline.core.prices import Integers
from pipeline.inputs.relations import FORMATS, Relation, code_of, day_of, literal, quoted, spellings
from pipeline.inputs.source import Only

UNTOLD = "DATE '0001-01-01'"
# Vectors of 2,048 rows that are drawn at a time.
VECTORS = 64
A_DAY = 86_400
KINDS = {"number": np.int32, "day": np.int64, "value": np.float64, "volume": np.float64}
# Below it lie the values that stand for no date at all.
EARLIEST = "1970-01-02"


def plain_rows(
    relation: Relation, ours: Mapping[str, str], value: str, only: Only, date_format: str
) -> pd.DataFrame | None:
    """security (categories), date, the value and volume; None if a cell is not plain.

    Args:
        relation: the open table.
        ours: its columns -> our names.
        value: ``close`` or ``return``.
        only: the securities and dates wanted, with spans.
        date_format: as declared; '' for ISO 8601.

    Returns:
        (n,) rows in the order of security and date, each pair once; volume NaN where there is no
        such column.
    """
    theirs = {our: name for name, our in ours.items()}
    if only.spans is None or not {"security", "date", value} <= set(theirs):
        return None
    if not only.codes or only.spans.empty or (only.day_limits() or ("",))[0] < EARLIEST:
        return None
    statement = _statement(relation, theirs, value, only, date_format)
    if statement is None:
        return None
    relation.base.register("codes", spellings(only.codes))
    number = pd.Index(only.codes).get_indexer(pd.Index(only.spans["security"])).astype(np.int32)
    relation.base.register("spans", only.spans[["first", "last"]].assign(number=number))
    relation.base.execute(
        "CREATE TEMP TABLE touched AS "
        "SELECT number, CAST(first AS DATE) AS first, CAST(last AS DATE) AS last FROM spans "
        f"UNION ALL SELECT DISTINCT wanted_number, {UNTOLD}, {UNTOLD} FROM codes"
    )
    try:
        drawn = _columns(relation.base.execute(statement), _most(only.spans))
    except duckdb.Error:
        return None
    return None if drawn is None else _table(*drawn, value, only)


def _statement(
    relation: Relation, theirs: Mapping[str, str], value: str, only: Only, date_format: str
) -> str | None:
    kinds = relation.kinds
    date, security = theirs["date"], theirs["security"]
    day = _plain_day(date, kinds[date], date_format)
    cells = [_plain_number(theirs.get(name), kinds) for name in (value, "volume")]
    if day is None or None in cells:
        return None
    when = day_of(date, kinds[date], date_format)
    limits = ""
    if kinds[date] != "VARCHAR":
        first, last = only.day_limits() or ("", "")
        limits = f" WHERE {quoted(date)} BETWEEN DATE '{first}' AND DATE '{last}'"
    # Each row meets one code and is kept or not: none is read twice where spans are many. A date
    # that cannot be compared meets a span of its own, and is then refused.
    days = f"CAST({day} AS DATE) - DATE '1970-01-01'"
    coded = (
        f"SELECT cells.*, wanted_number AS code_number, coalesce({when}, {UNTOLD}) AS compared_day "
        f"FROM {relation.view} AS cells JOIN codes ON {code_of(security)} = wanted_code{limits}"
    )
    return (
        f"SELECT code_number AS number, {days} AS day, {cells[0]} AS value, {cells[1]} AS volume "
        f"FROM ({coded}) SEMI JOIN touched ON touched.number = code_number "
        "AND compared_day BETWEEN touched.first AND touched.last"
    )


def _plain_day(name: str, kind: str, date_format: str) -> str | None:
    """A date or an error; None for a column of another kind."""
    cell = quoted(name)
    odd = "CAST(error('not a plain date') AS DATE)"
    if kind == "DATE":
        return f"CASE WHEN {cell} IS NULL THEN {odd} ELSE {cell} END"
    if kind.startswith("TIMESTAMP") and "ZONE" not in kind:
        return (
            f"CASE WHEN {cell} = date_trunc('day', {cell}) THEN CAST({cell} AS DATE) ELSE {odd} END"
        )
    if kind != "VARCHAR":
        return None
    if date_format:
        parts = {date_format[at : at + 2] for at, mark in enumerate(date_format) if mark == "%"}
        if parts != FORMATS:
            return None
        return f"CAST(strptime({cell}, {literal(date_format)}) AS DATE)"
    made = f"CAST({cell} AS DATE)"
    return f"CASE WHEN CAST({made} AS VARCHAR) = {cell} THEN {made} ELSE {odd} END"


def _plain_number(name: str | None, kinds: Mapping[str, str]) -> str | None:
    """A number, NaN for an empty cell, or an error; None for a column of another kind."""
    nothing = "CAST('nan' AS DOUBLE)"
    if name is None:
        return nothing
    cell, kind = quoted(name), kinds[name]
    if kind.startswith(("DECIMAL", "DOUBLE", "FLOAT")) or kind.endswith(("INT", "INTEGER")):
        return f"coalesce(CAST({cell} AS DOUBLE), {nothing})"
    if kind != "VARCHAR":
        return None
    # An underline is the only mark that the engine reads in numbers and the contract refuses.
    return (
        f"CASE WHEN {cell} IS NULL OR {cell} = '' THEN {nothing} WHEN contains({cell}, '_') "
        f"THEN CAST(error('not a plain number') AS DOUBLE) ELSE CAST({cell} AS DOUBLE) END"
    )


def _columns(result: Any, most: int) -> tuple[dict[str, np.ndarray], bool] | None:
    """The columns of a result, and whether its rows rise by security and date, each pair once.

    Drawn batch by batch into arrays of ``most`` rows, of which only what is filled takes memory;
    None if there are more rows, which a table with one row a security and date cannot have.
    """
    columns = {name: np.empty(most, kind) for name, kind in KINDS.items()}
    before, rising, rows = np.empty(0, np.int64), True, 0
    while len(batch := result.fetch_df_chunk(VECTORS)):
        here = slice(rows, rows + len(batch))
        if here.stop > most:
            return None
        if rising:
            numbers, days = batch["number"].to_numpy(), batch["day"].to_numpy()
            key = np.concatenate([before, _keys(numbers, days)])
            rising, before = bool((key[1:] > key[:-1]).all()), key[-1:]
        for name in KINDS:
            columns[name][here] = batch[name].to_numpy()
        columns["day"][here] *= A_DAY
        rows = here.stop
    return {name: column[:rows] for name, column in columns.items()}, rising


def _most(spans: pd.DataFrame) -> int:
    """Dates in all spans."""
    return int(((spans["last"] - spans["first"]).dt.days + 1).sum())


def _keys(security: np.ndarray, day: np.ndarray) -> Integers:
    """One number a row, which rises with security and day."""
    return (security.astype(np.int64) << 40) + day.astype(np.int64)


def _table(
    columns: dict[str, np.ndarray], rising: bool, value: str, only: Only
) -> pd.DataFrame | None:
    """The rows in order; None if a pair of security and date stands twice."""
    if any(np.isinf(columns[name]).any() for name in ("value", "volume")):
        return None
    if not rising:
        key = _keys(columns["number"], columns["day"])
        order = np.argsort(key, kind="stable")
        key = key[order]
        if (key[1:] == key[:-1]).any():
            return None
        del key
        for name in KINDS:
            columns[name] = columns[name][order]
    security = pd.Categorical.from_codes(columns.pop("number"), categories=pd.Index(only.codes))
    return pd.DataFrame(
        {
            "security": security,
            "date": columns["day"].view("datetime64[s]"),
            value: columns["value"],
            "volume": columns["volume"],
        },
        copy=False,
    )
