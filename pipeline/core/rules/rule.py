"""What a rule says to the person who reads it."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Rule:
    """One page of the catalogue.

    Attributes:
        key: the name that findings and ledger entries carry.
        title: for tables.
        meaning: what is the case when it is raised.
        why: why that matters.
        example: a case of it, invented.
        remedy: what to do.
    """

    key: str
    title: str
    meaning: str
    why: str
    example: str
    remedy: str
