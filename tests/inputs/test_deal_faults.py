"""Every way a deal list contradicts itself or the study: action, rule, rows and words.

The limits (a ratio of a hundred, a year between two offers, five deals a group) are common
practice, no source. Check digits are held against ``tests/reference/identifiers.json``.
"""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path

import pandas as pd
import pytest

from pipeline.core.findings import InputProblem, Severity
from pipeline.core.ledger import Action
from pipeline.core.rules import RULES
from pipeline.inputs.codes import CHECKS
from pipeline.inputs.files import Source
from pipeline.inputs.read import Tables, read_inputs
from pipeline.inputs.wanted import DealRules, Wanted
from tests.inputs.tables import Frames, frames, write_all, write_csv

ERROR, WARNING = Severity.ERROR, Severity.WARNING
FLAGGED, CHANGED, DROPPED = Action.FLAGGED, Action.CHANGED, Action.DROPPED
WANTED = Wanted(deal_numbers=("shares", "market_value"), deal_texts=("industry",))
RULES_OF_SHARES = DealRules(payment_shares=("in_cash", "in_shares"))
CODES = json.loads((Path(__file__).parents[1] / "reference" / "identifiers.json").read_text())
Spoil = Callable[[Frames], None]


def columns(**cells: list[str]) -> Spoil:
    """Columns of the three deals D1 (A), D2 (B), D3 (A), announced in March and June 2021."""

    def spoil(tables: Frames) -> None:
        tables["deals"] = tables["deals"].assign(**cells)

    return spoil


def read(folder: Path, spoil: Spoil, rules: DealRules, wanted: Wanted = WANTED) -> Tables:
    tables = {name: frame for name, frame in frames().items() if name != "candidates"}
    spoil(tables)
    return read_inputs(write_all(folder, tables), wanted, rules=rules)


NONE = DealRules()
Case = tuple[Spoil, DealRules, str, Severity, str, str, str]
FINDINGS: dict[str, Case] = {
    "rumour after the announcement": (
        columns(rumoured_at=["2021-03-01 08:01", "", ""], timestamp_zone=["Europe/London", "", ""]),
        NONE, "rumour_after", ERROR, "2", "rumoured_at", "1 rumours",
    ),
    "completed before it was announced": (
        columns(completed_at=["", "2021-03-01", "2021-09-01"]),
        NONE, "announced_too_late", ERROR, "3", "announced_at, completed_at", "completed before",
    ),
    "withdrawn before it was announced": (
        columns(withdrawn_at=["", "", "2021-05-31"]),
        NONE, "announced_too_late", ERROR, "4", "announced_at, withdrawn_at", "withdrawn before",
    ),
    "amended before it was announced": (
        columns(amended_at=["2021-02-26", "", ""]),
        NONE, "announced_too_late", ERROR, "2", "announced_at, amended_at", "amended before",
    ),
    "values from after the announcement": (
        columns(as_of=["2021-02-28", "2021-03-31", "2021-06-01"]),
        NONE, "known_too_late", ERROR, "3", "as_of", "values of 1 deals",
    ),
    "all completed, by status": (
        columns(status=["Completed", "completed ", "COMPLETED"]),
        NONE, "completed_only", WARNING, "", "status", "3 deals, all of them completed",
    ),
    "all completed, by date": (
        columns(completed_at=["2021-04-01", "2021-04-01", "2021-09-01"]),
        NONE, "completed_only", WARNING, "", "completed_at", "3 deals, all of them completed",
    ),
    "a company that buys itself": (
        columns(counterparty=["X", "b ", "Y"]),
        NONE, "deal_with_itself", ERROR, "3", "security, counterparty", "same company",
    ),
    "one code for two companies": (
        columns(isin=[CODES["valid"]["isin"][0], "", CODES["valid"]["isin"][1]]),
        NONE, "recycled_code", ERROR, "2, 4", "security, isin", "'A' with",
    ),
    "an ISIN with a slip": (
        columns(isin=[CODES["invalid"]["isin"][0], "", ""]),
        NONE, "check_digit", ERROR, "2", "isin", CODES["invalid"]["isin"][0],
    ),
    "a CUSIP with a slip": (
        columns(cusip=["", CODES["invalid"]["cusip"][0], ""]),
        NONE, "check_digit", ERROR, "3", "cusip", CODES["invalid"]["cusip"][0],
    ),
    "a SEDOL that lost a sign": (
        columns(sedol=["", "", CODES["valid"]["sedol"][0][1:]]),
        NONE, "check_digit", ERROR, "4", "sedol", CODES["valid"]["sedol"][0][1:],
    ),
    "a deal value of zero": (
        columns(deal_value=["10", "0", "5"]),
        NONE, "nonpositive_value", ERROR, "3", "deal_value", "1 amounts of zero or below",
    ),
    "a market value below zero": (
        columns(market_value=["-5", "", "300"]),
        NONE, "nonpositive_value", ERROR, "2", "market_value", "1 amounts",
    ),
    "units beside millions": (
        columns(deal_value=["50000000", "", "90000000"]),
        NONE, "money_units", ERROR, "2, 4", "deal_value, market_value", "times the company's",
    ),
    "one deal in other units": (
        columns(deal_value=["10", "20", "90000000"], market_value=["100", "100", "300"]),
        NONE, "money_units", WARNING, "4", "deal_value, market_value", "3e+05 times",
    ),
    "payment that does not add up": (
        columns(in_cash=["0.5", "1", "0.4"], in_shares=["0.5", "", "0.4"]),
        RULES_OF_SHARES, "payment_shares", ERROR, "4", "in_cash, in_shares", "add up to 0.8",
    ),
    "payment in percent that does not add up": (
        columns(in_cash=["50", "100", "40"], in_shares=["50", "", "0.6"]),
        RULES_OF_SHARES, "payment_shares", ERROR, "4", "in_cash, in_shares", "add up to 40.6",
    ),
    "percent among fractions": (
        columns(toehold=["30", "5", "0"]),
        DealRules(fractions=("toehold",)), "share_unit", ERROR, "2, 3, 4", "toehold", "0 to 30",
    ),
    "fractions among percent": (
        columns(toehold=["0.3", "0.05", "0"]),
        DealRules(percents=("toehold",)), "share_unit", ERROR, "2, 3, 4", "toehold", "0 to 0.3",
    ),
    "a word nobody declared": (
        columns(payment=["cash", "Cash ", "bonds"]),
        DealRules(levels={"payment": ("cash", "shares")}), "unknown_level", ERROR, "4", "payment",
        "'bonds'",
    ),
    "two sides and none named": (
        columns(side=["acquirer", "target", "acquirer"]),
        NONE, "side_not_named", ERROR, "", "side", "'acquirer', 'target'",
    ),
    "both sides and no column of sides": (
        columns(counterparty=["b ", "A", ""]),
        NONE, "side_not_named", ERROR, "2, 3", "security, counterparty", "such as A and b",
    ),
    "a side the list does not have": (
        columns(side=["acquirer", "target", "acquirer"]),
        DealRules(side="seller"), "side_not_named", ERROR, "", "side", "'acquirer', 'target'",
    ),
    "a side without a column": (
        columns(), DealRules(side="target"), "missing_column", ERROR, "", "side", "no such column",
    ),
    "columns about persons": (
        columns(adviser_email=["a@b.example", "", ""], Last_Name=["x", "", ""]),
        NONE, "personal_data", WARNING, "", "adviser_email, last_name", "speak of persons",
    ),
    "no exchange": (
        columns(exchange=["XLON", "", "XLON"]), NONE, "missing_value", ERROR, "3", "exchange", "1",
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", FINDINGS)
def test_a_fault_of_a_deal_is_named(name: str, tmp_path: Path) -> None:
    spoil, rules, rule, severity, row, column, part = FINDINGS[name]
    if severity is ERROR:
        with pytest.raises(InputProblem) as caught:
            read(tmp_path, spoil, rules)
        found = caught.value.findings
    else:
        found = read(tmp_path, spoil, rules).findings
    assert len(found) == 1
    (one,) = found
    assert (one.rule, one.severity, one.row, one.column) == (rule, severity, row, column)
    assert rule in RULES
    assert part in one.got
    assert one.expected
    assert one.remedy.endswith(".")


Entry = tuple[str, str, Action, str]
ENTRIES: dict[str, tuple[Spoil, DealRules, list[Entry]]] = {
    "very large beside its company": (
        columns(deal_value=["2000", "", "3"], market_value=["100", "", "300"]),
        NONE, [("D1", "odd_size", FLAGGED, "20 times the market value")],
    ),
    "very small beside its company": (
        columns(deal_value=["20", "", "0.003"], market_value=["100", "", "300"]),
        NONE, [("D3", "odd_size", FLAGGED, "1e-05 times the market value")],
    ),
    "a second offer within the year": (
        columns(counterparty=["X", "X", "x"]),
        NONE, [("D3", "amended_offer", FLAGGED, "92 days after D1")],
    ),
    "spelling": (
        columns(industry=["jam", " JAM", "jam"]),
        NONE, [("D2", "one_spelling", CHANGED, "industry: 'JAM'")],
    ),
    "declared spelling": (
        columns(payment=["cash", "CASH", "cash  and shares"]),
        DealRules(levels={"payment": ("Cash", "Cash and shares")}),
        [
            ("D1", "one_spelling", CHANGED, "payment: 'cash'"),
            ("D2", "one_spelling", CHANGED, "payment: 'CASH'"),
            ("D3", "one_spelling", CHANGED, "payment: 'cash  and shares'"),
        ],
    ),
    "rounded shares of payment": (
        columns(in_cash=["0.5", "1", "0.333"], in_shares=["0.5", "", "0.666"]),
        RULES_OF_SHARES, [("D3", "payment_scaled", CHANGED, "sum 0.999")],
    ),
    "the other side": (
        columns(side=["Acquirer", "target", "acquirer "]),
        DealRules(side="acquirer"), [("D2 (row 3)", "other_side", DROPPED, "target")],
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", ENTRIES)
def test_what_is_done_to_a_deal_is_in_the_ledger(name: str, tmp_path: Path) -> None:
    spoil, rules, wanted = ENTRIES[name]
    tables = read(tmp_path, spoil, rules)
    assert tables.findings == ()
    found = [(e.deal, e.rule, e.action, e.value) for e in tables.ledger.entries]
    assert found == wanted
    assert all(rule in RULES for _, rule, _, _ in found)
    assert tables.ledger.rows_kept == len(tables.deals)


def test_the_same_deal_on_both_sides(tmp_path: Path) -> None:
    """Its two rows may bear one identifier: only one of them is read."""
    spoil = columns(deal_id=["D1", "D1", "D3"], side=["acquirer", "target", "acquirer"])
    tables = read(tmp_path, spoil, DealRules(side="Acquirer"))
    assert tables.deals["deal_id"].tolist() == ["D1", "D3"]
    assert [entry.deal for entry in tables.ledger.dropped] == ["D1 (row 3)"]
    assert (tables.ledger.rows_in, tables.ledger.rows_kept) == (3, 2)


def test_scaled_shares_add_up(tmp_path: Path) -> None:
    spoil = columns(in_cash=["50", "99.5", ""], in_shares=["50.4", "", ""])
    deals = read(tmp_path, spoil, RULES_OF_SHARES).deals
    sums = deals["in_cash"].fillna(0) + deals["in_shares"].fillna(0)
    assert sums.tolist() == pytest.approx([100, 100, 0])
    assert deals[["in_cash", "in_shares"]].iloc[2].isna().all()


def test_words_take_one_spelling_and_codes_keep_theirs(tmp_path: Path) -> None:
    spoil = columns(industry=["Jam", "jam", "Jam"], payment=["cash", " CASH", "cash"])
    rules = DealRules(levels={"payment": ("Cash",)})
    wanted = Wanted(deal_texts=("industry", "security"))
    deals = read(tmp_path, spoil, rules, wanted).deals
    assert deals["industry"].tolist() == ["Jam"] * 3
    assert deals["payment"].tolist() == ["Cash"] * 3
    assert deals["security"].tolist() == ["A", "B", "A"]


def test_a_rumour_gives_moments_of_its_own(tmp_path: Path) -> None:
    spoil = columns(rumoured_at=["2021-02-26 08:00", "", "2021-05-28"])
    deals = read(tmp_path, spoil, NONE).deals
    assert deals["rumoured_date"].dt.strftime("%Y-%m-%d").tolist()[::2] == [
        "2021-02-26",
        "2021-05-28",
    ]
    assert deals["rumoured_utc"].notna().tolist() == [True, False, False]
    assert "rumoured_at" not in deals


def test_columns_a_list_lacks_are_not_made(tmp_path: Path) -> None:
    deals = read(tmp_path, columns(), NONE).deals
    for name in ("side", "isin", "cusip", "sedol", "rumoured_date", "completed_at", "as_of"):
        assert name not in deals


def test_candidates_known_too_late(tmp_path: Path) -> None:
    tables = frames()
    tables["candidates"]["as_of"] = ["2021-03-02", "2020-12-31", "2021-12-31"]
    with pytest.raises(InputProblem) as caught:
        read_inputs(write_all(tmp_path, tables), WANTED)
    (found,) = caught.value.findings
    assert (found.rule, found.row, found.column) == ("known_too_late", "2", "as_of")


def stopped_by(folder: Path, spoil: Spoil, codes: list[str]) -> list[str]:
    tables = {name: frame for name, frame in frames().items() if name != "candidates"}
    spoil(tables)
    sources = write_all(folder, tables)
    listed = write_csv(pd.DataFrame({"security": codes}), folder / "restricted.csv")
    sources["restricted"] = Source("restricted", listed)
    try:
        read_inputs(sources, WANTED)
    except InputProblem as fault:
        return [f"{item.rule} {item.row}" for item in fault.findings]
    return []


def test_a_restricted_company_stops_the_run(tmp_path: Path) -> None:
    assert stopped_by(tmp_path, columns(), ["ZZ"]) == []
    assert stopped_by(tmp_path, columns(), ["ZZ", "b"]) == ["restricted_company 3"]
    spoil = columns(counterparty=["X", "Y", "Z"])
    assert stopped_by(tmp_path, spoil, ["z"]) == ["restricted_company 4"]


def test_the_stop_names_no_company(tmp_path: Path) -> None:
    tables = {name: frame for name, frame in frames().items() if name != "candidates"}
    tables["deals"]["security"] = ["KNIGHTSBRIDGE", "B", "A"]
    sources = write_all(tmp_path, tables)
    listed = write_csv(pd.DataFrame({"security": ["Knightsbridge"]}), tmp_path / "restricted.csv")
    sources["restricted"] = Source("restricted", listed)
    with pytest.raises(InputProblem) as caught:
        read_inputs(sources, WANTED)
    told = str([item for item in caught.value.findings if item.rule == "restricted_company"])
    assert "compliance" in told
    assert "knightsbridge" not in told.lower()


@pytest.mark.parametrize("kind", CHECKS)
def test_check_digits_are_those_of_an_independent_library(kind: str) -> None:
    assert len(CODES["valid"][kind]) >= 8
    assert all(CHECKS[kind](code) for code in CODES["valid"][kind])
    assert not any(CHECKS[kind](code) for code in CODES["invalid"][kind])
    assert not CHECKS[kind](CODES["valid"][kind][0][:-1])
    assert not CHECKS[kind]("")


@pytest.mark.parametrize(
    "cells",
    [
        {"counterparty": ["B", "A", ""], "side": ["acquirer", "acquirer", "acquirer"]},
        {
            "counterparty": ["B", "A", ""],
            "announced_at": ["2020-03-01", "2021-03-02", "2021-06-01"],
        },
        {"counterparty": ["B", "C", "B"]},
    ],
    ids=["sides told", "more than a year apart", "one side of each pair"],
)
def test_companies_that_may_meet_twice(cells: dict[str, list[str]], tmp_path: Path) -> None:
    rules = DealRules(side="acquirer") if "side" in cells else NONE
    kept = read(tmp_path, columns(**cells), rules)
    assert len(kept.deals) == 3
