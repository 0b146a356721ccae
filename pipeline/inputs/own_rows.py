"""Rows of a file under its own column names, as they stand there."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import replace

from pipeline.core.findings import InputProblem
from pipeline.inputs.files import ROW, loose_name, names_of, read_table
from pipeline.inputs.source import Source

Cells = dict[int, tuple[object, ...]]


def own_rows(source: Source, rows: Collection[int]) -> tuple[tuple[str, ...], Cells]:
    """The file's column names, and the cells of the rows with these numbers.

    A table that cannot be read has neither.
    """
    plain = replace(source, columns={}, wide=False)
    try:
        table = read_table(plain)
        names = {loose_name(name): name for name in names_of(plain)}
    except InputProblem:
        return (), {}
    kept = table[table[ROW].isin(list(rows))]
    columns = [str(name) for name in kept.columns if name != ROW]
    cells = {
        int(row): tuple(values)
        for row, *values in kept[[ROW, *columns]].itertuples(index=False, name=None)
    }
    return tuple(names.get(name, name) for name in columns), cells


def numbers_of(source: Source) -> dict[str, int]:
    """Deal identifier -> the number of its first row; empty if the list cannot be read."""
    try:
        table = read_table(source, ["deal_id"])
    except InputProblem:
        return {}
    if "deal_id" not in table:
        return {}
    first = table.drop_duplicates("deal_id")
    return {
        str(deal).strip(): int(row) for deal, row in zip(first["deal_id"], first[ROW], strict=True)
    }
