"""A deal list that holds its outcome: what is read, what is refused, what is lost."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from pipeline.core.findings import Finding, InputProblem
from pipeline.core.outcome import UNITS
from pipeline.inputs.files import Source
from pipeline.inputs.ready import OutcomeColumns, ReadyTables, read_ready
from pipeline.inputs.units import unit_doubt
from pipeline.inputs.wanted import DealRules, Wanted

PREMIUM = OutcomeColumns("premium", UNITS["percent"])
WANTED = Wanted(deal_numbers=("agreed",))
ROWS = pd.DataFrame(
    {
        "deal_id": [f"B{at}" for at in range(8)],
        "premium": [31.0, 12.5, -4.0, 55.0, 27.0, 18.0, 40.0, 22.0],
        "error": [2.0, 1.0, 3.0, 2.5, 1.5, 2.0, 4.0, 1.0],
        "announced_at": [f"202{at}-03-0{at + 1}" for at in range(8)],
        "agreed": [0, 1] * 4,
    }
)


def read(
    folder: Path, rows: pd.DataFrame, outcome: OutcomeColumns = PREMIUM, wanted: Wanted = WANTED
) -> ReadyTables:
    path = folder / "bids.csv"
    rows.to_csv(path, index=False)
    return read_ready({"deals": Source("deals", path)}, wanted, outcome)


def refusal(
    folder: Path, rows: pd.DataFrame, outcome: OutcomeColumns = PREMIUM
) -> tuple[Finding, ...]:
    with pytest.raises(InputProblem) as caught:
        read(folder, rows, outcome)
    return caught.value.findings


def test_a_name_and_an_outcome_are_enough(tmp_path: Path) -> None:
    found = read(tmp_path, ROWS[["deal_id", "premium"]], wanted=Wanted())
    np.testing.assert_allclose(found.deals["premium"], ROWS["premium"] / 100)
    assert list(found.deals.columns) == ["deal_id", "premium", "_row"]
    assert [stage.stage for stage in found.ledger] == ["deal list", "outcome"]


def test_error_date_and_year_come_along(tmp_path: Path) -> None:
    outcome = replace(PREMIUM, error="error", date="announced_at")
    deals = read(tmp_path, ROWS, outcome).deals
    np.testing.assert_allclose(deals["premium_std_dev"], ROWS["error"] / 100)
    assert deals["announced_at"].tolist() == ROWS["announced_at"].tolist()
    assert deals["year"].tolist() == list(range(2020, 2028))


def test_a_deal_without_an_outcome_is_in_the_ledger(tmp_path: Path) -> None:
    found = read(tmp_path, ROWS.assign(premium=ROWS["premium"].where(ROWS.index != 3)))
    (entry,) = found.ledger[1].dropped
    assert (entry.deal, entry.rule) == ("B3", "missing_outcome")
    assert found.ledger[1].rows_kept == len(found.deals) == 7
    assert len(found.listed) == 8


def test_an_exact_repeat_is_in_the_ledger(tmp_path: Path) -> None:
    found = read(tmp_path, pd.concat([ROWS, ROWS.iloc[[2]]]))
    assert [entry.rule for entry in found.ledger[0].dropped] == ["duplicate_deal"]
    assert len(found.deals) == 8


FAULTS: dict[str, tuple[dict[str, object], OutcomeColumns, str, str]] = {
    "words": ({"premium": ["high", *ROWS["premium"][1:]]}, PREMIUM, "unparseable_number",
              "premium"),
    "failed formula": ({"premium": ["#DIV/0!", *ROWS["premium"][1:]]}, PREMIUM, "error_cell",
                       "premium"),
    "decimals for percent": ({"premium": ROWS["premium"] / 1e4}, PREMIUM, "outcome_unit",
                             "premium"),
    "percent for decimals": ({}, replace(PREMIUM, unit=UNITS["decimal"]), "outcome_unit",
                             "premium"),
    "percent for ratios": ({}, replace(PREMIUM, unit=UNITS["price ratio"]), "outcome_unit",
                           "premium"),
    "ratios for decimals": ({"premium": 1 + ROWS["premium"].abs() / 100},
                            replace(PREMIUM, unit=UNITS["decimal"]), "outcome_unit", "premium"),
    "basis points for percent": ({"premium": ROWS["premium"] * 100}, PREMIUM, "outcome_unit",
                                 "premium"),
    "error missing": ({"error": ROWS["error"].where(ROWS.index != 5)},
                      replace(PREMIUM, error="error"), "outcome_error", "error"),
    "error below zero": ({"error": -ROWS["error"]}, replace(PREMIUM, error="error"),
                         "outcome_error", "error"),
    "identifier twice": ({"deal_id": ["B0", "B0", *ROWS["deal_id"][2:]]}, PREMIUM,
                         "conflicting_deal", "deal_id"),
    "no name": ({"deal_id": ["", *ROWS["deal_id"][1:]]}, PREMIUM, "missing_value", "deal_id"),
    "no date": ({"announced_at": "soon"}, replace(PREMIUM, date="announced_at"),
                "unparseable_date", "announced_at"),
    "two currencies": ({"value": 5.0, "currency": ["EUR", "USD"] * 4},
                       replace(PREMIUM, base="value"), "mixed_currencies", "currency"),
}  # fmt: skip


@pytest.mark.parametrize("what", FAULTS)
def test_faults_are_named(what: str, tmp_path: Path) -> None:
    changed, outcome, rule, column = FAULTS[what]
    found = refusal(tmp_path, ROWS.assign(**changed), outcome)
    assert (rule, column) in [(finding.rule, finding.column) for finding in found]


def test_an_absent_column_is_named_with_its_use(tmp_path: Path) -> None:
    (finding,) = refusal(tmp_path, ROWS.drop(columns="premium"))
    assert (finding.rule, finding.column) == ("missing_column", "premium")
    assert "outcome" in finding.expected


def test_a_certain_unit_is_kept_with_a_warning(tmp_path: Path) -> None:
    small = ROWS.assign(premium=ROWS["premium"] / 1e4)
    found = read(tmp_path, small, replace(PREMIUM, certain=True))
    (finding,) = found.findings
    assert (finding.rule, str(finding.severity)) == ("outcome_unit", "warning")
    assert len(found.deals) == 8


def test_errors_of_another_unit_are_doubted(tmp_path: Path) -> None:
    outcome = replace(PREMIUM, error="error")
    found = read(tmp_path, ROWS.assign(error=ROWS["error"] / 1e4), outcome)
    assert [finding.rule for finding in found.findings] == ["outcome_error"]


@pytest.mark.parametrize("key", ["percent", "decimal", "price ratio", "basis points", "log points"])
def test_each_unit_passes_for_its_own_cells(key: str) -> None:
    unit, shares = UNITS[key], ROWS["premium"].to_numpy() / 100
    assert unit_doubt(shares * unit.given + unit.zero, unit) is None
    # Abnormal returns of a few percent pass as well.
    assert unit_doubt(shares / 10 * unit.given + unit.zero, unit) is None


def test_few_cells_money_and_numbers_are_not_doubted() -> None:
    assert unit_doubt(np.array([3000.0, 4000.0]), UNITS["percent"]) is None
    assert unit_doubt(np.full(9, 1e7), UNITS["money"]) is None


def test_the_two_sides_of_deals_are_never_pooled(tmp_path: Path) -> None:
    both = ROWS.assign(side=["acquirer", "target"] * 4)
    (finding,) = refusal(tmp_path, both)
    assert finding.rule == "side_not_named"
    path = tmp_path / "bids.csv"
    found = read_ready({"deals": Source("deals", path)}, WANTED, PREMIUM, rules=DealRules("target"))
    assert found.deals["deal_id"].tolist() == ["B1", "B3", "B5", "B7"]
    assert {entry.rule for entry in found.ledger[0].dropped} == {"other_side"}
    assert (found.ledger[0].rows_in, found.ledger[0].rows_kept) == (8, 4)


def test_a_restricted_list_needs_codes_and_stops_the_run(tmp_path: Path) -> None:
    listed = tmp_path / "restricted.csv"
    pd.DataFrame({"security": ["C7"]}).to_csv(listed, index=False)
    path = tmp_path / "bids.csv"
    sources = {"deals": Source("deals", path), "restricted": Source("restricted", listed)}
    rules = []
    for table in (ROWS, ROWS.assign(security=[f"C{at}" for at in range(8)])):
        table.to_csv(path, index=False)
        with pytest.raises(InputProblem) as caught:
            read_ready(sources, WANTED, PREMIUM)
        rules.append([finding.rule for finding in caught.value.findings])
    assert rules == [["missing_column"], ["restricted_company"]]
