"""Wide tables: one column a security (or exchange, or currency), dates down."""

from __future__ import annotations

from collections.abc import Iterable, Mapping

import pandas as pd

from pipeline.core.findings import Finding, Severity
from pipeline.inputs.relations import Relation, quoted
from pipeline.inputs.source import ROW, Only, Source

NUMBER, LONG = "laid_row", "long_cells"


def columns_of_codes(names: Iterable[str], date: str, only: Only | None) -> dict[str, str]:
    """Column of the file -> its code: every column but the date, or those that are wanted."""
    wanted = None if only is None else set(only.codes)
    found = {name: str(name).strip() for name in names if name not in (date, ROW)}
    return {name: code for name, code in found.items() if wanted is None or code in wanted}


def laid_long(relation: Relation, source: Source, date: str, codes: Mapping[str, str]) -> Relation:
    """The same cells with a row a code and date; empty cells are no rows."""
    if not codes:
        return _no_rows(relation, source, date)
    plain = all(_is_number(relation.kinds[name]) for name in codes)
    kind = "DOUBLE" if plain else "VARCHAR"
    cells = "".join(f", CAST({quoted(name)} AS {kind}) AS {quoted(codes[name])}" for name in codes)
    on = ", ".join(quoted(code) for code in codes.values())
    relation.base.execute(
        f"CREATE TEMP VIEW {LONG} AS SELECT * FROM (UNPIVOT (SELECT {quoted(date)} AS date, "
        f"{NUMBER}{cells} FROM (SELECT *, {relation.row} AS {NUMBER} FROM cells)) "
        f"ON {on} INTO NAME {quoted(source.code)} VALUE {quoted(source.value)})"
    )
    kinds = {"date": relation.kinds[date], source.code: "VARCHAR", source.value: kind}
    return Relation(relation.base, kinds, NUMBER, LONG)


def _no_rows(relation: Relation, source: Source, date: str) -> Relation:
    kinds = {"date": relation.kinds[date], source.code: "VARCHAR", source.value: "DOUBLE"}
    relation.base.execute(
        f"CREATE TEMP VIEW {LONG} AS SELECT {quoted(date)} AS date, '' AS {quoted(source.code)}, "
        f"CAST(NULL AS DOUBLE) AS {quoted(source.value)}, 0 AS {NUMBER} FROM cells LIMIT 0"
    )
    return Relation(relation.base, kinds, NUMBER, LONG)


def _is_number(kind: str) -> bool:
    return (
        kind.startswith(("DECIMAL", "DOUBLE", "FLOAT"))
        or kind.endswith("INT")
        or (kind.endswith("INTEGER"))
    )


def melted(
    table: pd.DataFrame, source: Source, date: str, codes: Mapping[str, str]
) -> pd.DataFrame:
    """The same of a table that was read whole."""
    kept = table[[date, *codes, ROW]].rename(columns={date: "date", **codes})
    long = kept.melt(id_vars=["date", ROW], var_name=source.code, value_name=source.value)
    filled = long[source.value].notna() & (long[source.value] != "")
    return long.loc[filled, ["date", source.code, source.value, ROW]].reset_index(drop=True)


def recognised(source: Source, codes: Mapping[str, str]) -> Finding:
    """The note that a table was taken for a wide one."""
    shown = ", ".join(list(codes.values())[:3])
    return Finding(
        "wide_table",
        Severity.NOTE,
        source.file,
        got=f"no column '{source.code}', and {len(codes)} columns called as codes are ({shown})",
        expected=f"a row a {source.code} and date, or a column a {source.code}",
        remedy=f"It is read as a column a {source.code}; say so by "
        f"inputs.source.{source.table}.layout = 'wide'.",
    )
