"""The same deals measured with one choice about their events made differently."""

from __future__ import annotations

from dataclasses import dataclass

from pipeline.core.abnormal import AbnormalReturns


@dataclass(frozen=True, slots=True, eq=False)
class Reading:
    """One such choice.

    Attributes:
        dimension: what is chosen: ``day zero`` or ``listing``.
        words: the choice, as a row of a table names it.
        changed: deals for which it makes a difference.
        abnormal: all deals under it.
    """

    dimension: str
    words: str
    changed: int
    abnormal: AbnormalReturns
