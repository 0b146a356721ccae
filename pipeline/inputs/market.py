"""Daily closes, index levels and factor returns."""

from __future__ import annotations

import pandas as pd

from pipeline.core.findings import Finding, Severity
from pipeline.inputs.contracts import Column, row_list
from pipeline.inputs.files import ROW, Source, read_table
from pipeline.inputs.typed import one_row_a_date, theirs, typed


def read_prices(
    source: Source, only: tuple[str, list[str]] | None, date_format: str
) -> tuple[pd.DataFrame, list[Finding]]:
    """Closes of the securities ``only`` names: security, date, close, volume."""
    columns = [
        Column("security", "text", filled=True, why="the code the deals use"),
        Column("date", "date", filled=True),
        Column("close", "number", why="the day's last price, adjusted for splits and dividends"),
        Column("volume", "number", optional=True),
    ]
    raw = read_table(source, [column.name for column in columns], only)
    table, findings = typed(raw, source, columns, date_format)
    if table.empty:
        findings.append(_none_priced(source, only))
    bad = table["close"] <= 0
    if bad.any():
        findings.append(_nonpositive(table.loc[bad], source))
    once, more = one_row_a_date(table, source, ("security", "date"))
    return once, findings + more


def _none_priced(source: Source, only: tuple[str, list[str]] | None) -> Finding:
    named = only[1] if only else []
    return Finding(
        "no_prices",
        Severity.ERROR,
        source.file,
        got=f"no price of {', '.join(named[:4])}" + (" or the others" if len(named) > 4 else ""),
        expected="prices of the securities that deals and candidates name",
        remedy="Compare the codes of the two tables.",
        column=theirs(source, ("security",)),
    )


def _nonpositive(rows: pd.DataFrame, source: Source) -> Finding:
    return Finding(
        "nonpositive_price",
        Severity.ERROR,
        source.file,
        got=f"{len(rows)} closes of zero or below, first {rows['close'].iloc[0]:g}",
        expected="prices above zero",
        remedy="Leave the cell empty when there was no price.",
        row=row_list(rows[ROW]),
        column=source.columns.get("close", "close"),
    )


def read_benchmarks(source: Source, date_format: str) -> tuple[pd.DataFrame, list[Finding]]:
    """Index levels: exchange, date, close."""
    columns = [
        Column("exchange", "text", filled=True, why="the exchange whose market it is"),
        Column("date", "date", filled=True),
        Column("close", "number", why="the index level, dividends included if prices are"),
    ]
    table, findings = typed(read_table(source), source, columns, date_format)
    bad = table["close"] <= 0
    if bad.any():
        findings.append(_nonpositive(table.loc[bad], source))
    once, more = one_row_a_date(table, source, ("exchange", "date"))
    return once, findings + more


def read_factors(source: Source, date_format: str) -> tuple[pd.DataFrame, list[Finding]]:
    """Factor returns: exchange, date, one column a factor."""
    raw = read_table(source)
    named = [str(name) for name in raw.columns if name not in ("exchange", "date", ROW)]
    columns = [
        Column("exchange", "text", filled=True, why="the exchange whose factors they are"),
        Column("date", "date", filled=True),
        *(Column(name, "number") for name in named),
    ]
    table, findings = typed(raw, source, columns, date_format)
    for name in named:
        spread = float(table[name].std())
        if spread > 0.2:
            findings.append(
                Finding(
                    "bad_value",
                    Severity.ERROR,
                    source.file,
                    got=f"a daily standard deviation of {spread:.2g}",
                    expected="daily returns as decimals: 0.01 for one percent",
                    remedy="Divide the column by 100.",
                    column=name,
                )
            )
    once, more = one_row_a_date(table, source, ("exchange", "date"))
    return once, findings + more
