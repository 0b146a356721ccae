"""The ledger: why each row that is missing from a table is missing.

Invariant of every stage: rows in = rows kept + rows dropped, one dropping entry a lost row.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass
from enum import StrEnum

import pandas as pd


class Action(StrEnum):
    """What was done to the row."""

    DROPPED = "dropped"
    CHANGED = "changed"
    FLAGGED = "flagged"


@dataclass(frozen=True, slots=True)
class LedgerEntry:
    """What happened to one deal at one stage, under which rule, with the value that decided."""

    deal: str
    rule: str
    action: Action
    value: str
    threshold: str


@dataclass(frozen=True, slots=True)
class StageLedger:
    """All that one stage did to the rows it was given.

    Raises:
        ValueError: if a deal is dropped twice in the stage, or more are dropped than came in.
    """

    stage: str
    rows_in: int
    entries: tuple[LedgerEntry, ...] = ()

    def __post_init__(self) -> None:
        dropped = Counter(e.deal for e in self.entries if e.action is Action.DROPPED)
        twice = [deal for deal, count in dropped.items() if count > 1]
        if twice:
            raise ValueError(f"stage {self.stage} drops {twice} more than once")
        if len(dropped) > self.rows_in:
            raise ValueError(f"stage {self.stage} drops more rows than it was given")

    @property
    def dropped(self) -> tuple[LedgerEntry, ...]:
        """The entries of rows that left here."""
        return tuple(e for e in self.entries if e.action is Action.DROPPED)

    @property
    def rows_kept(self) -> int:
        """Rows handed on."""
        return self.rows_in - len(self.dropped)


@dataclass(frozen=True, slots=True)
class Ledger:
    """The stages in order.

    Raises:
        ValueError: if a stage was given another number of rows than the last one kept.
    """

    stages: tuple[StageLedger, ...] = ()

    def __post_init__(self) -> None:
        for before, after in zip(self.stages, self.stages[1:], strict=False):
            if before.rows_kept != after.rows_in:
                raise ValueError(
                    f"{before.stage} kept {before.rows_kept} rows, "
                    f"{after.stage} was given {after.rows_in}"
                )

    def then(self, *stages: StageLedger) -> Ledger:
        """The ledger with further stages at its end."""
        return Ledger(self.stages + stages)

    def __iter__(self) -> Iterator[tuple[str, LedgerEntry]]:
        for stage in self.stages:
            for entry in sorted(stage.entries, key=lambda e: (e.deal, e.rule, e.action)):
                yield stage.stage, entry

    @property
    def rows_in(self) -> int:
        """Rows read at the start."""
        return self.stages[0].rows_in if self.stages else 0

    @property
    def rows_kept(self) -> int:
        """Rows left at the end."""
        return self.stages[-1].rows_kept if self.stages else 0

    def frame(self) -> pd.DataFrame:
        """One row an entry: stage, deal, rule, action, value, threshold; sorted within a stage."""
        columns = ["stage", "deal", "rule", "action", "value", "threshold"]
        rows = [[stage, e.deal, e.rule, str(e.action), e.value, e.threshold] for stage, e in self]
        return pd.DataFrame(rows, columns=columns, dtype="str")
