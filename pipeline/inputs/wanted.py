"""Which columns a study uses."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Wanted:
    """Which columns beyond the fixed ones a study uses, by table and kind."""

    deal_numbers: tuple[str, ...] = ()
    deal_texts: tuple[str, ...] = ()
    candidate_numbers: tuple[str, ...] = ()
    candidate_texts: tuple[str, ...] = ()
