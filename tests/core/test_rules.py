"""Every rule a check may name is in the catalogue, in words."""

from __future__ import annotations

import ast
from pathlib import Path

import pytest

from pipeline.core.rules import RULES, rule_title

PIPELINE = Path(__file__).resolve().parents[2] / "pipeline"
MAKERS = {"Finding", "problem", "LedgerEntry", "_error", "_drop"}


def named_rules() -> set[str]:
    """Rule keys written as literals in calls that make findings and ledger entries."""
    found = set()
    for path in PIPELINE.rglob("*.py"):
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            if not isinstance(node, ast.Call) or not isinstance(node.func, ast.Name):
                continue
            if node.func.id not in MAKERS or not node.args:
                continue
            at = 1 if node.func.id in ("LedgerEntry", "_drop") else 0
            if len(node.args) > at and isinstance(node.args[at], ast.Constant):
                found.add(str(node.args[at].value))
    return found


def test_the_search_finds_rules() -> None:
    assert {"unknown_key", "short_estimation", "missing_column"} <= named_rules()


def test_every_rule_named_is_explained() -> None:
    assert named_rules() - set(RULES) == set()


def test_every_page_is_of_a_rule_that_can_be_raised() -> None:
    rooms = PIPELINE / "core" / "rules"
    written = {
        node.value
        for path in PIPELINE.rglob("*.py")
        if rooms not in path.parents
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8")))
        if isinstance(node, ast.Constant) and isinstance(node.value, str)
    }
    assert set(RULES) - written == set()


def test_every_rule_is_shown_by_a_test() -> None:
    tests = Path(__file__).resolve().parents[1]
    said = "\n".join(path.read_text(encoding="utf-8") for path in tests.rglob("*.py"))
    assert [key for key in RULES if key not in said] == []


def test_no_two_pages_give_one_example() -> None:
    examples = [rule.example for rule in RULES.values()]
    assert len(set(examples)) == len(examples)


@pytest.mark.parametrize("key", RULES)
def test_each_rule_says_what_why_and_what_to_do(key: str) -> None:
    rule = RULES[key]
    for text in (rule.title, rule.meaning, rule.why, rule.remedy):
        assert text[0].isupper()
    for text in (rule.meaning, rule.why, rule.example, rule.remedy):
        assert text.endswith(".")
    assert rule_title(key) == rule.title


def test_an_unknown_rule_is_shown_in_plain_words() -> None:
    assert rule_title("some_new_rule") == "Some new rule"
