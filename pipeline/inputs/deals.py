"""The deal list: one row a deal, with the moment of its announcement."""

from __future__ import annotations

import pandas as pd

from pipeline.core.findings import Finding, Severity
from pipeline.core.ledger import Action, LedgerEntry, StageLedger
from pipeline.inputs.contracts import Column, row_list
from pipeline.inputs.files import ROW, Source, read_table
from pipeline.inputs.moments import read_moments
from pipeline.inputs.typed import extra_columns, typed
from pipeline.inputs.wanted import Wanted

MONEY = ("market_value", "deal_value")


def read_deals(
    source: Source, wanted: Wanted, zone: str, date_format: str
) -> tuple[tuple[pd.DataFrame, StageLedger], list[Finding]]:
    """One row a deal, the ledger of the rows that left, and the findings."""
    fixed = [
        Column("deal_id", "text", filled=True, why="a name for each deal that no other has"),
        Column("security", "text", filled=True, why="the acquirer's code in the price file"),
        Column("exchange", "text", filled=True, why="the ISO 10383 code of the listing"),
        Column("announced_at", "stamp", filled=True, why="when the deal became public"),
        Column("timestamp_zone", "text", optional=True),
        Column("currency", "text", optional=True),
        Column("market_value", "number", optional="market_value" not in wanted.deal_numbers),
        Column("earnings_release", "date", optional=True),
        Column("status", "text", optional=True),
        Column("year", "number", optional="year" not in wanted.deal_numbers),
    ]
    columns = fixed + extra_columns(fixed, wanted.deal_numbers, wanted.deal_texts)
    table, findings = typed(read_table(source), source, columns, date_format)
    moments, more = read_moments(table, source, zone, date_format)
    findings += more
    deals, ledger, more = _one_row_a_deal(moments, source)
    findings += more + _one_currency(deals, source, wanted)
    no_year = deals["year"].isna()
    deals["year"] = deals["year"].where(~no_year, deals["announced_date"].dt.year)
    return (deals.drop(columns="announced_at"), ledger), findings


def _one_row_a_deal(
    deals: pd.DataFrame, source: Source
) -> tuple[pd.DataFrame, StageLedger, list[Finding]]:
    """Exact duplicates leave with a ledger entry; rows that differ are an error."""
    content = [name for name in deals.columns if name != ROW]
    repeated = deals.duplicated(content, keep="first")
    entries = tuple(
        LedgerEntry(
            f"{deal} (row {row})", "duplicate_deal", Action.DROPPED, f"row {row}", "one row a deal"
        )
        for deal, row in deals.loc[repeated, ["deal_id", ROW]].itertuples(index=False)
    )
    kept = deals[~repeated].reset_index(drop=True)
    conflict = kept[kept.duplicated("deal_id", keep=False)]
    findings = [
        Finding(
            "conflicting_deal",
            Severity.ERROR,
            source.file,
            got=f"deal '{deal!s}' on rows that differ",
            expected="one row a deal identifier",
            remedy="Keep one row, or give the second deal an identifier of its own.",
            row=row_list(rows[ROW]),
            column=source.columns.get("deal_id", "deal_id"),
        )
        for deal, rows in conflict.groupby("deal_id", sort=True)
        if deal
    ]
    return kept, StageLedger("deal list", len(deals), entries), findings


def _one_currency(deals: pd.DataFrame, source: Source, wanted: Wanted) -> list[Finding]:
    used = [name for name in MONEY if name in wanted.deal_numbers or name == "market_value"]
    named = sorted({code for code in deals["currency"] if code})
    if len(named) < 2 or not any(name in deals and deals[name].notna().any() for name in used):
        return []
    return [
        Finding(
            "mixed_currencies",
            Severity.ERROR,
            source.file,
            got=", ".join(named),
            expected="one currency in all money columns",
            remedy="Convert the money columns at the rate before the announcement.",
            column=source.columns.get("currency", "currency"),
        )
    ]
