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


@pytest.mark.parametrize("key", RULES)
def test_each_rule_says_what_why_and_what_to_do(key: str) -> None:
    rule = RULES[key]
    for text in (rule.title, rule.what, rule.why, rule.remedy):
        assert text[0].isupper()
    for text in (rule.what, rule.why, rule.remedy):
        assert text.endswith(".")
    assert rule_title(key) == rule.title


def test_an_unknown_rule_is_shown_in_plain_words() -> None:
    assert rule_title("some_new_rule") == "Some new rule"
