"""Tables that few studies have: listings of a company, other news, and restricted companies."""

from __future__ import annotations

import pandas as pd

from pipeline.core.findings import Finding, Severity
from pipeline.inputs.contracts import Column, row_numbers
from pipeline.inputs.files import ROW, Source, read_table
from pipeline.inputs.typed import finding, typed

PARTIES = ("security", "counterparty", "isin", "cusip", "sedol")


def read_listings(source: Source) -> tuple[pd.DataFrame, list[Finding]]:
    """The lines of companies listed more than once: security, line, exchange, primary, home,
    currency.
    """
    columns = [
        Column("security", "text", filled=True, why="the company's code in the deal list"),
        Column("line", "text", filled=True, why="the listing's code in the price file"),
        Column("exchange", "text", filled=True, why="the ISO 10383 code of the listing"),
        Column("primary", "number", optional=True),
        Column("home", "number", optional=True),
        Column("currency", "text", optional=True),
    ]
    table, findings = typed(read_table(source), source, columns, "")
    for column, name in (("primary", "primary listing"), ("home", "home market")):
        marked = table[table[column] == 1]
        several = marked[marked.duplicated("security", keep=False)]
        if not several.empty:
            findings.append(_conflict(several, source, column, f"several lines as {name}"))
    again = table[table.duplicated("line", keep=False)]
    if not again.empty:
        findings.append(_conflict(again, source, "line", "one line on several rows"))
    return table, findings


def _conflict(rows: pd.DataFrame, source: Source, column: str, got: str) -> Finding:
    return finding(
        "conflicting_listing",
        rows,
        source,
        (column,),
        (
            f"{got}: {', '.join(rows['line'].unique()[:4])}",
            "one row a line, and one primary and one home line a company",
            "Correct the rows.",
        ),
    )


def read_news(source: Source, date_format: str) -> tuple[pd.DataFrame, list[Finding]]:
    """Other news of companies: security, date, kind."""
    columns = [
        Column("security", "text", filled=True, why="the company's code in the deal list"),
        Column("date", "date", filled=True, why="the day it became public"),
        Column("kind", "text", filled=True, why="what it was: earnings, guidance, dividend"),
    ]
    table, findings = typed(read_table(source), source, columns, date_format)
    return table.drop_duplicates(["security", "date", "kind"]).drop(columns=ROW), findings


def restricted_findings(deals: pd.DataFrame, source: Source, listed: Source) -> list[Finding]:
    """The stop for deals that touch a company of the house's restricted list.

    Names are not repeated: the list itself may be confidential.

    Args:
        deals: the deal list with its ``_row`` numbers.
        source: its file.
        listed: the restricted list, one column ``security``.

    Raises:
        InputProblem: if the list cannot be read.
    """
    column = Column("security", "text", filled=True, why="codes of restricted companies")
    table, findings = typed(read_table(listed), listed, [column], "")
    codes = {code.casefold() for code in table["security"] if code}
    touched = pd.Series(False, index=deals.index)
    for name in PARTIES:
        if name in deals:
            touched |= deals[name].astype(str).str.casefold().isin(codes)
    if not touched.any():
        return findings
    stop = Finding(
        "restricted_company",
        Severity.ERROR,
        source.file,
        got=f"{int(touched.sum())} deals of companies on the restricted list",
        expected="no company of the restricted list",
        remedy="Stop and ask compliance: whether this study may be made is theirs to decide.",
        rows=row_numbers(deals.loc[touched, ROW]),
    )
    return [*findings, stop]
