"""How far a column's name says what we call something: the second witness."""

from __future__ import annotations

import re
from collections.abc import Iterable

EXACT, PARTLY = 1.0, 0.6


def parts_of(name: str) -> tuple[str, ...]:
    """The words a name is made of, in lower case: ``AnnDate`` and ``ann_date`` are alike."""
    split = re.sub(r"(?<=[a-z0-9])(?=[A-Z])", "_", name)
    return tuple(part for part in re.split(r"[^a-z0-9]+", split.lower()) if part)


def likeness(name: str, words: Iterable[str]) -> float:
    """1 if the name is one of ``words``, 0.6 if it holds the parts of one, 0 otherwise."""
    have = parts_of(name)
    joined = "".join(have)
    best = 0.0
    for word in words:
        wanted = parts_of(word)
        if have == wanted or joined == "".join(wanted):
            return EXACT
        if set(wanted) <= set(have):
            best = PARTLY
    return best
