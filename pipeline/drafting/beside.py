"""Tables with one column a code: read long where their headings are codes that are known."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import pandas as pd

from pipeline.core.findings import InputProblem
from pipeline.drafting.roles import small
from pipeline.drafting.signs import CURRENCIES
from pipeline.drafting.tables import Found, found_of
from pipeline.inputs.files import ROW, read_table
from pipeline.returns.sessions import known_exchanges

KNOWN = 0.5  # share of the deals' codes that must stand among the headings


def laid_long(tables: Sequence[Found]) -> list[Found]:
    """The tables, those of closes, levels or rates side by side as one row a code and date.

    Headings count as codes if they are exchanges, currencies, or the words of a column of another
    table: nothing else tells a column of prices from one of anything else.
    """
    return [_long(found, [other for other in tables if other is not found]) for found in tables]


def series_of(found: Found) -> tuple[str, list[str]]:
    """The column of dates and the columns of numbers of a table that has nothing else."""
    dates, numbers = found.of_kind("date"), found.of_kind("number")
    series = [name for name in numbers if found.signs[name].varies]
    if len(dates) == 1 and series and len(series) == len(found.signs) - 1:
        return (dates[0], series) if found.one_row_a(dates[0]) else ("", [])
    return "", []


def value_of(found: Found, series: Sequence[str]) -> str:
    """Whether the numbers are closes or returns."""
    signed = [found.signs[name] for name in series if found.signs[name].low < 0]
    return "return" if signed and all(small(signs) for signs in signed) else "close"


def _long(found: Found, others: Sequence[Found]) -> Found:
    date, series = series_of(found)
    table = _table(series, others)
    if not table:
        return found
    value = "rate" if table == "rates" else value_of(found, series)
    source = replace(found.source, table=table, columns={"date": date}, wide=True, value=value)
    try:
        frame = read_table(source).drop(columns=ROW)
    except InputProblem:
        return found
    frame.columns = pd.Index([str(name) for name in frame.columns])
    return found_of(source, frame)


def _table(series: Sequence[str], others: Sequence[Found]) -> str:
    """What the headings are codes of; '' if nothing says."""
    headings = {name.upper() for name in series}
    if len(headings) < 1:
        return ""
    if headings <= known_exchanges():
        return "benchmarks"
    if headings <= CURRENCIES:
        return "rates"
    for other in others:
        for name in other.of_kind("text"):
            words = other.frame[name].dropna().astype(str).str.strip()
            codes = words.str.upper().str.replace(" ", "_").unique()
            if len(codes) > 1 and pd.Index(codes).isin(headings).mean() >= KNOWN:
                return "prices"
    return ""
