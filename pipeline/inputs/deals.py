"""The deal list: one row a deal, with the moment of its announcement."""

from __future__ import annotations

from collections.abc import Sequence

import pandas as pd

from pipeline.core.findings import Finding, InputProblem, Severity
from pipeline.core.ledger import Action, LedgerEntry, StageLedger
from pipeline.inputs.contracts import Column
from pipeline.inputs.deal_checks import deal_findings, personal_data, same_pair_flags, size_flags
from pipeline.inputs.declared import declared
from pipeline.inputs.files import ROW, Source, read_table
from pipeline.inputs.moments import read_moments
from pipeline.inputs.typed import extra_columns, finding, typed
from pipeline.inputs.wanted import DealRules, Wanted

MONEY = ("market_value", "deal_value")
# Columns whose cells are codes, in which a capital letter may count.
CODES = (
    "deal_id", "security", "exchange", "timestamp_zone", "currency", "counterparty", "side",
    "isin", "cusip", "sedol",
)  # fmt: skip


# Columns that are checked and kept where the list has them; a list without them gets none.
EXTRAS = (
    Column("side", "text", optional=True),
    Column("isin", "text", optional=True),
    Column("cusip", "text", optional=True),
    Column("sedol", "text", optional=True),
    Column("deal_value", "number", optional=True),
    Column("rumoured_at", "stamp", optional=True),
    Column("amended_at", "date", optional=True),
    Column("completed_at", "date", optional=True),
    Column("withdrawn_at", "date", optional=True),
    Column("as_of", "date", optional=True),
)
NO_RULES = DealRules()


def read_deals(
    source: Source, wanted: Wanted, zone: str, date_format: str, rules: DealRules = NO_RULES
) -> tuple[tuple[pd.DataFrame, StageLedger], list[Finding]]:
    """One row a deal, the ledger of the rows that left, and the findings."""
    raw = read_table(source)
    fixed = _columns(wanted, raw, source, rules)
    numbers = (*wanted.deal_numbers, *rules.numbers)
    columns = fixed + extra_columns(fixed, numbers, (*wanted.deal_texts, *rules.levels))
    table, findings = typed(raw, source, columns, date_format)
    for moment in ("announced_at", *({"rumoured_at"} & set(raw))):
        table, more = read_moments(table, source, zone, date_format, moment)
        findings += more
    ours, left = one_side(table, source, rules.side)
    deals, once, more = one_row_a_deal(ours, source)
    findings += more
    money = [name for name in MONEY if name in wanted.deal_numbers or name == "market_value"]
    findings += [] if rules.common else one_currency(deals, source, money)
    kept, noted, declared_findings = as_declared(deals, raw, source, wanted, rules)
    findings += declared_findings + deal_findings(kept, source)
    noted += [*size_flags(kept), *same_pair_flags(kept)]
    ledger = StageLedger(once.stage, len(table), (*left, *once.entries, *noted))
    no_year = kept["year"].isna()
    kept["year"] = kept["year"].where(~no_year, kept["announced_date"].dt.year)
    unused = [name for name in ("announced_at", "rumoured_at") if name in kept]
    return (kept.drop(columns=unused), ledger), findings


def _columns(wanted: Wanted, raw: pd.DataFrame, source: Source, rules: DealRules) -> list[Column]:
    """The contract: what every list holds, and what this one holds besides."""
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
        Column("counterparty", "text", optional=True),
        Column("year", "number", optional="year" not in wanted.deal_numbers),
    ]
    why = "which side of the deal the row is"
    side = [Column("side", "text", filled=True, why=why)] if rules.side else []
    named = {*raw, *source.columns} - {column.name for column in side}
    held = [item for item in EXTRAS if item.name in named]
    return [*fixed, *side, *held]


def as_declared(
    deals: pd.DataFrame, raw: pd.DataFrame, source: Source, wanted: Wanted, rules: DealRules
) -> tuple[pd.DataFrame, list[LedgerEntry], list[Finding]]:
    """The deals as the study declares them, what was changed, and what its columns hold wrong."""
    words = [
        name
        for name in wanted.deal_texts
        if name not in CODES and pd.api.types.is_string_dtype(deals[name])
    ]
    kept, changes, findings = declared(deals, source, rules, words)
    return kept, changes, findings + personal_data([str(name) for name in raw.columns], source)


def one_side(
    deals: pd.DataFrame, source: Source, side: str
) -> tuple[pd.DataFrame, list[LedgerEntry]]:
    """The rows of one side of the deals: acquirers and targets are never pooled.

    Raises:
        InputProblem: ``side_not_named`` if a list with a column ``side`` meets a study that names
            none of its sides, in whatever case and spacing.
    """
    if "side" not in deals:
        return deals, []
    words = deals["side"].str.casefold()
    mine = words == side.strip().casefold()
    if not side or not mine.any():
        known = ", ".join(f"'{word}'" for word in deals["side"].unique() if word)
        raise InputProblem([_no_side(source, known)])
    entries = [
        LedgerEntry(f"{deal} (row {row})", "other_side", Action.DROPPED, word, side)
        for deal, row, word in deals.loc[~mine, ["deal_id", ROW, "side"]].itertuples(index=False)
    ]
    return deals[mine].reset_index(drop=True), entries


def _no_side(source: Source, known: str) -> Finding:
    return Finding(
        "side_not_named",
        Severity.ERROR,
        source.file,
        got=f"rows of {known}",
        expected="the one side of the deals that the study is about",
        remedy="Set event_time.side to one of them; make a second study for the other.",
        column=source.columns.get("side", "side"),
    )


def one_row_a_deal(
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
        finding(
            "conflicting_deal",
            rows,
            source,
            ("deal_id",),
            (
                f"deal '{deal!s}' on rows that differ",
                "one row a deal identifier",
                "Keep one row, or give the second deal an identifier of its own.",
            ),
        )
        for deal, rows in conflict.groupby("deal_id", sort=True)
        if deal
    ]
    return kept, StageLedger("deal list", len(deals), entries), findings


def one_currency(deals: pd.DataFrame, source: Source, money: Sequence[str]) -> list[Finding]:
    """An error if one of the columns ``money`` is filled and ``currency`` names several."""
    named = sorted({code for code in deals["currency"] if code})
    if len(named) < 2 or not any(name in deals and deals[name].notna().any() for name in money):
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
