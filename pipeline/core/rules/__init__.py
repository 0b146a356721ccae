"""The one catalogue of rules that a finding or a ledger entry may name, in words.

Thresholds live with the checks; here is what each rule means to the person who reads it.
"""

from __future__ import annotations

from collections.abc import Mapping

from pipeline.core.rules import deal_list, deals, prices, regression, scrutiny, study, tables
from pipeline.core.rules.rule import Rule

__all__ = ["RULES", "Rule", "rule_title"]

RULES: Mapping[str, Rule] = {
    rule.key: rule
    for room in (study, tables, prices, deal_list, deals, regression, scrutiny)
    for rule in room.RULES
}


def rule_title(key: str) -> str:
    """The title of a rule, or its key in plain words if it is not in the catalogue."""
    rule = RULES.get(key)
    return rule.title if rule else key.replace("_", " ").capitalize()
