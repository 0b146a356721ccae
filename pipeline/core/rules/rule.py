"""What a rule says to the person who reads it."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Rule:
    """A rule's key, its title for tables, what it does, why it matters and what to do."""

    key: str
    title: str
    what: str
    why: str
    remedy: str
