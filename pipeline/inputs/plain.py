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
from pipeline.inputs.relations import FORMATS, Relation, code_of, day_of, literal, quoted
from pipeline.inputs.source import Only

BATCH = 1 << 17
DECIMAL = r"\s*[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?\s*"
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
    statement = _statement(relation, theirs, value, date_format)
    if statement is None:
        return None
    spans = only.spans
    at = pd.Index(only.codes).get_indexer(pd.Index(spans["security"])).astype(np.int32)
    wanted = pd.DataFrame({"code": spans["security"], "at": at})
    wanted["first"], wanted["last"] = spans["first"], spans["last"]
    relation.base.register("touched", wanted)
    try:
        columns = _columns(relation.base.sql(statement).to_arrow_reader(BATCH))
    except duckdb.Error:
        return None
    return _table(columns, value, only)


def _statement(
    relation: Relation, theirs: Mapping[str, str], value: str, date_format: str
) -> str | None:
    kinds = relation.kinds
    date, security = theirs["date"], theirs["security"]
    day = _plain_day(date, kinds[date], date_format)
    cells = [_plain_number(theirs.get(name), kinds) for name in (value, "volume")]
    if day is None or None in cells:
        return None
    on = f"{code_of(security, kinds[security])} = touched.code"
    when = day_of(date, kinds[date], date_format)
    within = f"{when} BETWEEN touched.first AND touched.last"
    if kinds[date] == "VARCHAR":  # a date that cannot be compared must not be passed over
        within = f"({when} IS NULL OR {within})"
    else:
        limits = "(SELECT min(first) FROM touched) AND (SELECT max(last) FROM touched)"
        within += f" AND {quoted(date)} BETWEEN {limits}"
    return (
        f"SELECT touched.at, CAST({day} AS DATE) - DATE '1970-01-01' AS day, {cells[0]} AS value, "
        f"{cells[1]} AS volume FROM {relation.view} JOIN touched ON {on} AND {within}"
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
    iso = f"regexp_full_match({cell}, '\\d{{4}}-\\d{{2}}-\\d{{2}}')"
    return f"CASE WHEN {iso} THEN CAST({cell} AS DATE) ELSE {odd} END"


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
    return (
        f"CASE WHEN {cell} IS NULL OR {cell} = '' THEN {nothing} "
        f"WHEN regexp_full_match({cell}, {literal(DECIMAL)}) THEN CAST(trim({cell}) AS DOUBLE) "
        "ELSE CAST(error('not a plain number') AS DOUBLE) END"
    )


def _columns(batches: Any) -> dict[str, np.ndarray]:
    """The columns of a result, drawn batch by batch so that it never stands in memory twice."""
    kinds = {"at": np.int32, "day": np.int32, "value": np.float64, "volume": np.float64}
    parts: dict[str, list[np.ndarray]] = {name: [] for name in kinds}
    for batch in batches:
        for name, kind in kinds.items():
            parts[name].append(batch.column(name).to_numpy(zero_copy_only=False).astype(kind))
    found = {}
    for name, kind in kinds.items():
        found[name] = np.concatenate(parts.pop(name) or [np.empty(0, kind)])
    return found


def _table(columns: dict[str, np.ndarray], value: str, only: Only) -> pd.DataFrame | None:
    key = columns["at"].astype(np.int64) << 32 | columns["day"].astype(np.int64)
    if np.isinf(columns["value"]).any() or np.isinf(columns["volume"]).any():
        return None
    if not _rising(key):
        order = np.argsort(key, kind="stable")
        key = key[order]
        if not _rising(key):
            return None
        columns = {name: cells[order] for name, cells in columns.items()}
    del key
    security = pd.Categorical.from_codes(columns["at"], categories=pd.Index(only.codes))
    day = columns["day"].astype("datetime64[D]").astype("datetime64[s]")
    return pd.DataFrame(
        {"security": security, "date": day, value: columns["value"], "volume": columns["volume"]},
        copy=False,
    )


def _rising(key: Integers) -> bool:
    return bool((key[1:] > key[:-1]).all())
