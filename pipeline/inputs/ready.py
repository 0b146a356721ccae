"""A deal list that holds its outcome already: one row a deal, and no prices."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
import pandas as pd

from pipeline.core.findings import Finding, InputProblem, Severity, raise_errors
from pipeline.core.ledger import Action, LedgerEntry, StageLedger
from pipeline.core.outcome import Unit
from pipeline.inputs.candidates import read_candidates
from pipeline.inputs.contracts import Column, row_numbers
from pipeline.inputs.deals import (
    MONEY,
    NO_RULES,
    as_declared,
    one_currency,
    one_row_a_deal,
    one_side,
)
from pipeline.inputs.files import ROW, Source, read_table
from pipeline.inputs.others import restricted_findings
from pipeline.inputs.postgres import fetching
from pipeline.inputs.typed import extra_columns, typed
from pipeline.inputs.units import error_scale, unit_doubt
from pipeline.inputs.wanted import DealRules, Wanted

ANNOUNCED, SIDE = "announced_at", "side"


@dataclass(frozen=True, slots=True)
class OutcomeColumns:
    """Which columns of the deal list hold the outcome and what belongs to it.

    ``error``, ``date`` and ``base`` (the money the outcome is a share of) are '' without one;
    ``certain`` makes a unit that the size of the cells speaks against a warning.
    """

    value: str
    unit: Unit
    error: str = ""
    date: str = ""
    base: str = ""
    certain: bool = False


@dataclass(frozen=True, slots=True)
class ReadyTables:
    """The deals that have an outcome, every row that was listed, and how rows left.

    Attributes:
        deals: ``deal_id``, the outcome as stored under its column's name, its standard error
            under ``<outcome>_std_dev`` if there is one, and the study's variables.
        listed: the same of every deal read, the outcome missing where it is.
        ledger: the stages "deal list" and "outcome".
        candidates: company by year, or None.
        findings: warnings and notes.
        digests: table -> SHA-256 of a query's result.
    """

    deals: pd.DataFrame
    listed: pd.DataFrame
    ledger: tuple[StageLedger, StageLedger]
    candidates: pd.DataFrame | None
    findings: tuple[Finding, ...]
    digests: Mapping[str, str] = field(default_factory=dict)


def read_ready(
    sources: Mapping[str, Source],
    wanted: Wanted,
    outcome: OutcomeColumns,
    *,
    date_format: str = "",
    rules: DealRules = NO_RULES,
) -> ReadyTables:
    """Read and check the deal list and, if there is one, the table of candidates.

    Raises:
        InputProblem: with the errors of all files at once.
    """
    with fetching() as fetcher:
        local = {name: source for name, source in sources.items() if not source.is_postgres}
        found: list[Finding] = []
        for name in sources.keys() - local.keys():
            try:
                local[name] = fetcher.at_hand(sources[name])
            except InputProblem as fault:
                found += fault.findings
        raise_errors(found)
        return _read_ready(local, wanted, outcome, date_format, rules, fetcher.digests)


def _read_ready(
    sources: Mapping[str, Source],
    wanted: Wanted,
    outcome: OutcomeColumns,
    date_format: str,
    rules: DealRules,
    digests: Mapping[str, str],
) -> ReadyTables:
    source = sources["deals"]
    found: list[Finding] = []
    listed, candidates = None, None
    try:
        fixed = _columns(wanted, outcome, coded="restricted" in sources)
        listed, ledger, findings = _read_list(
            source, fixed, wanted, outcome, source.dates(date_format), rules
        )
        found += findings
        if "restricted" in sources:
            found += restricted_findings(listed, source, sources["restricted"])
    except InputProblem as fault:
        found += fault.findings
    if "candidates" in sources:
        try:
            file = sources["candidates"]
            candidates, findings = read_candidates(file, wanted, file.dates(date_format))
            found += findings
        except InputProblem as fault:
            found += fault.findings
    raise_errors(found)
    assert listed is not None
    kept, lost = _with_outcome(listed, outcome.value)
    return ReadyTables(kept, listed, (ledger, lost), candidates, tuple(found), digests)


def _read_list(
    source: Source,
    fixed: list[Column],
    wanted: Wanted,
    outcome: OutcomeColumns,
    date_format: str,
    rules: DealRules,
) -> tuple[pd.DataFrame, StageLedger, list[Finding]]:
    raw = read_table(source)
    if SIDE in raw or rules.side:
        fixed = [*fixed, Column(SIDE, "text", filled=True, why="which side of the deal it is")]
    if ANNOUNCED in raw:
        fixed = [replace(item, optional=item.optional or item.name == "year") for item in fixed]
    numbers = (*wanted.deal_numbers, *rules.numbers)
    columns = fixed + extra_columns(fixed, numbers, (*wanted.deal_texts, *rules.levels))
    table, findings = typed(raw, source, columns, date_format)
    ours, left = one_side(table, source, rules.side)
    once, ledger, more = one_row_a_deal(ours, source)
    deals, noted, further = as_declared(once, raw, source, wanted, rules)
    ledger = StageLedger(ledger.stage, len(table), (*left, *ledger.entries, *noted))
    more += further
    money = {outcome.base, *(set(MONEY) & set(wanted.deal_numbers))}
    money |= set() if outcome.unit.relative else {outcome.value}
    findings += more + one_currency(deals, source, sorted(money - {""}))
    findings += _checked(deals, source, outcome)
    absent = [item.name for item in fixed if item.optional and item.name not in raw]
    return _stored(deals.drop(columns=absent), outcome), ledger, findings


def _columns(wanted: Wanted, outcome: OutcomeColumns, *, coded: bool) -> list[Column]:
    """The contract: a name and the outcome are a must, all else as far as the study uses it.

    ``coded`` asks for every company's code, as a restricted list does.
    """
    used = (*wanted.deal_numbers, *wanted.deal_texts)
    by_year = bool(wanted.candidate_numbers or wanted.candidate_texts)
    listed = [
        Column("deal_id", "text", filled=True, why="a name for each deal that no other has"),
        Column(outcome.value, "number", why="the outcome named in the study"),
    ]
    if outcome.error:
        listed.append(Column(outcome.error, "number", why="the outcome's standard error"))
    if outcome.base:
        listed.append(Column(outcome.base, "number", why="the money the outcome is a share of"))
    if outcome.date:
        listed.append(Column(outcome.date, "date", why="the date named in the study"))
    why = "the company's code in the study's other tables"
    coded |= by_year
    listed += [
        Column(
            "security", "text", filled=coded, optional=not coded and "security" not in used, why=why
        ),
        Column(ANNOUNCED, "date", optional=True),
        Column("year", "number", optional="year" not in used),
        Column("currency", "text", optional="currency" not in used),
    ]
    return list({column.name: column for column in reversed(listed)}.values())[::-1]


def _checked(deals: pd.DataFrame, source: Source, outcome: OutcomeColumns) -> list[Finding]:
    """What is wrong with the outcome's size and with its standard errors."""
    values = deals[outcome.value].to_numpy(np.float64)
    column = source.columns.get(outcome.value, outcome.value)
    findings = []
    doubt = unit_doubt(values, outcome.unit)
    if doubt is not None:
        severity = Severity.WARNING if outcome.certain else Severity.ERROR
        findings.append(Finding("outcome_unit", severity, source.file, *doubt, column=column))
    if outcome.error:
        findings += _errors_checked(deals, source, outcome)
    return findings


def _errors_checked(deals: pd.DataFrame, source: Source, outcome: OutcomeColumns) -> list[Finding]:
    errors, known = deals[outcome.error], deals[outcome.value].notna()
    column = source.columns.get(outcome.error, outcome.error)
    findings = []
    for wrong, got in ((known & errors.isna(), "no standard error"), (errors < 0, "below zero")):
        if wrong.any():
            findings.append(
                Finding(
                    "outcome_error",
                    Severity.ERROR,
                    source.file,
                    got=got,
                    expected="a standard error of zero or above wherever there is an outcome",
                    remedy="Fill the cells, empty the outcome of these deals, or take "
                    "outcome.standard_error out of the study.",
                    rows=row_numbers(deals.loc[wrong, ROW]),
                    column=column,
                )
            )
    doubt = error_scale(deals[outcome.value].to_numpy(), errors.to_numpy())
    if doubt is not None and not findings:
        findings.append(
            Finding("outcome_error", Severity.WARNING, source.file, *doubt, column=column)
        )
    return findings


def _stored(deals: pd.DataFrame, outcome: OutcomeColumns) -> pd.DataFrame:
    """The outcome and its error as stored, the date as words, the year from the date if need be."""
    changed: dict[str, Any] = {
        outcome.value: outcome.unit.stored(deals[outcome.value].to_numpy(np.float64))
    }
    if outcome.error:
        errors = deals[outcome.error].to_numpy(np.float64)
        changed[f"{outcome.value}_std_dev"] = outcome.unit.stored_error(errors)
    dated = next((name for name in (ANNOUNCED, outcome.date) if name in deals), "")
    if dated:
        years = deals[dated].dt.year.astype(np.float64)
        changed["year"] = deals["year"].fillna(years) if "year" in deals else years
    if ANNOUNCED in deals:
        changed["announced_date"] = deals[ANNOUNCED]
    if outcome.date:
        changed[outcome.date] = deals[outcome.date].dt.strftime("%Y-%m-%d").fillna("").astype("str")
    unused = [name for name in (outcome.error, ANNOUNCED) if name and name != outcome.date]
    return deals.assign(**changed).drop(columns=[name for name in unused if name in deals])


def _with_outcome(listed: pd.DataFrame, column: str) -> tuple[pd.DataFrame, StageLedger]:
    known = listed[column].notna()
    entries = tuple(
        LedgerEntry(deal, "missing_outcome", Action.DROPPED, "empty cell", "an outcome")
        for deal in listed.loc[~known, "deal_id"].astype(str)
    )
    return listed[known].reset_index(drop=True), StageLedger("outcome", len(listed), entries)
