"""Codes that two tables share: the strongest witness for which column names the company."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

import pandas as pd

from pipeline.drafting.kinds import Recognised, Sorted
from pipeline.drafting.matching import Match
from pipeline.drafting.roles import PROVES

BETTER = 0.2
ROLE = "security"


def agreed(kinds: Sorted) -> Sorted:
    """The tables with the column of companies that the price file knows best.

    A list may hold an ISIN, a ticker and a name; the price file is written in one of them.
    """
    prices = kinds.by_kind.get("prices")
    if prices is None or not prices.column(ROLE):
        return kinds
    codes = _codes(prices.found.frame[prices.column(ROLE)])
    changed = {
        kind: _with_known(item, codes) if kind in ("deals", "candidates") else item
        for kind, item in kinds.by_kind.items()
    }
    return Sorted(changed, kinds.left)


def _codes(cells: pd.Series) -> frozenset[str]:
    return frozenset(cells.dropna().astype(str).str.strip())


def _share(own: frozenset[str], codes: frozenset[str]) -> float:
    return len(own & codes) / len(own) if own else 0.0


def _with_known(item: Recognised, codes: frozenset[str]) -> Recognised:
    """The table with another column of companies if the prices know far more of its codes."""
    known = {
        name: _share(_codes(item.found.frame[name]), codes)
        for name, signs in item.found.signs.items()
        if signs.kind in ("text", "number")
    }
    if not known:
        return item
    best = max(known, key=lambda name: known[name])
    own = known.get(item.column(ROLE), 0.0)
    if known[best] < own + BETTER:
        return item
    kept: Mapping[str, Match] = {
        role: match for role, match in item.matches.items() if match.column != best
    }
    matches = {**kept, ROLE: Match(ROLE, best, PROVES, 0.0)}
    lacking = tuple(role for role in item.lacking if role.name != ROLE)
    return replace(item, matches=matches, lacking=lacking)
