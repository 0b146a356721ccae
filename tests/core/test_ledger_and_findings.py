"""The ledger's invariants, and findings as they reach a person."""

from __future__ import annotations

import ast
from pathlib import Path

import pytest

import pipeline
from pipeline.core.findings import (
    Finding,
    InputProblem,
    Severity,
    findings_frame,
    problem,
    raise_errors,
)
from pipeline.core.ledger import Action, Ledger, LedgerEntry, StageLedger
from pipeline.core.rules import RULES, rule_title

PLACE_OF_RULE = {
    "Finding": 0,
    "problem": 0,
    "Refusal": 0,
    "_error": 0,
    "LedgerEntry": 1,
    "_drop": 1,
    "_drops": 2,
}


def drop(deal: str, rule: str = "no_prices") -> LedgerEntry:
    return LedgerEntry(deal, rule, Action.DROPPED, "v", "t")


def flag(deal: str, rule: str = "confounded") -> LedgerEntry:
    return LedgerEntry(deal, rule, Action.FLAGGED, "v", "t")


def test_rows_in_are_rows_kept_and_rows_dropped() -> None:
    stage = StageLedger("one", 5, (drop("A"), flag("B"), drop("C")))
    assert stage.rows_kept == 3
    assert [entry.deal for entry in stage.dropped] == ["A", "C"]
    ledger = Ledger((stage,)).then(StageLedger("two", 3, (drop("B"),)), StageLedger("three", 2))
    assert (ledger.rows_in, ledger.rows_kept) == (5, 2)
    assert ledger.rows_in == ledger.rows_kept + sum(len(s.dropped) for s in ledger.stages)
    assert (Ledger().rows_in, Ledger().rows_kept) == (0, 0)


def test_a_row_is_lost_once() -> None:
    with pytest.raises(ValueError, match="more than once"):
        StageLedger("one", 5, (drop("A"), drop("A", "outside_history")))
    with pytest.raises(ValueError, match="more rows than"):
        StageLedger("one", 1, (drop("A"), drop("B")))
    with pytest.raises(ValueError, match="one kept 4 rows, two was given 5"):
        Ledger((StageLedger("one", 5, (drop("A"),)), StageLedger("two", 5)))


def test_the_ledger_as_a_table_is_sorted_within_a_stage() -> None:
    entries = (flag("B"), drop("C"), drop("A"), flag("B", "time_unknown"))
    frame = Ledger((StageLedger("one", 5, entries), StageLedger("two", 3, (drop("B"),)))).frame()
    assert list(frame.columns) == ["stage", "deal", "rule", "action", "value", "threshold"]
    assert frame["deal"].tolist() == ["A", "B", "B", "C", "B"]
    assert frame["rule"].tolist()[1:3] == ["confounded", "time_unknown"]
    assert frame["action"].tolist() == ["dropped", "flagged", "flagged", "dropped", "dropped"]
    shuffled = (entries[2], entries[3], entries[0], entries[1])
    again = Ledger((StageLedger("one", 5, shuffled), StageLedger("two", 3, (drop("B"),)))).frame()
    assert frame.equals(again)
    assert Ledger().frame().empty


def finding(severity: Severity, **where: str) -> Finding:
    return Finding("bad_value", severity, "deals.xlsx", "a", "b", "c", **where)


@pytest.mark.parametrize(
    ("where", "words"),
    [
        ({}, "deals.xlsx"),
        ({"row": "7"}, "deals.xlsx, row 7"),
        ({"row": "7, 9"}, "deals.xlsx, rows 7, 9"),
        ({"row": "7", "column": "size"}, "deals.xlsx, row 7, column or key 'size'"),
    ],
)
def test_where_a_finding_points(where: dict[str, str], words: str) -> None:
    assert finding(Severity.ERROR, **where).where == words


def test_errors_are_raised_together_and_warnings_travel() -> None:
    found = [finding(severity, row=severity) for severity in (*Severity, Severity.ERROR)]
    with pytest.raises(InputProblem) as caught:
        raise_errors(found)
    assert [item.row for item in caught.value.findings] == ["error", "error"]
    raise_errors(found[1:3])
    frame = findings_frame(found)
    assert frame["severity"].tolist() == ["error", "warning", "note", "error"]
    assert list(frame.columns) == [
        "rule", "severity", "file", "row", "column", "got", "expected", "remedy",
    ]  # fmt: skip
    assert findings_frame([]).columns.equals(frame.columns)


def test_a_problem_says_where_and_what() -> None:
    fault = problem("no_prices", "prices.csv", got="nothing", expected="b", remedy="c", row="4")
    assert str(fault) == "prices.csv, row 4: nothing"
    assert fault.findings[0].severity is Severity.ERROR


def named_rules() -> set[str]:
    """Rule keys that the source writes down where it makes findings and ledger entries."""
    keys: set[str] = set()
    for path in Path(pipeline.__file__).parent.rglob("*.py"):
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            if not isinstance(node, ast.Call) or not isinstance(node.func, ast.Name):
                continue
            at = PLACE_OF_RULE.get(node.func.id)
            rule = node.args[at] if at is not None and len(node.args) > at else None
            if isinstance(rule, ast.Constant):
                keys.add(rule.value)
    return keys


def test_every_rule_the_source_names_is_in_the_catalogue() -> None:
    keys = named_rules()
    assert len(keys) > 30
    assert keys <= set(RULES)


@pytest.mark.parametrize("key", RULES)
def test_every_rule_is_explained(key: str) -> None:
    rule = RULES[key]
    assert rule.key == key
    assert rule_title(key) == rule.title
    for text in (rule.title, rule.meaning, rule.why, rule.remedy):
        assert text
        assert text[0].isupper()
    assert all(text.endswith(".") for text in (rule.meaning, rule.why, rule.example, rule.remedy))


def test_a_rule_outside_the_catalogue_is_put_in_words() -> None:
    assert rule_title("some_new_rule") == "Some new rule"
