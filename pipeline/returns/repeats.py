"""Several deals of one company: which of those whose headline windows meet stand for themselves."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import pandas as pd

from pipeline.core.ledger import Action, LedgerEntry, StageLedger
from pipeline.core.window import Window

STAGE = "repeated deals"
# What an event made of several deals keeps from the first of them; all else is the largest's.
OF_THE_FIRST = (
    "deal_id", "line", "exchange", "column", "position", "day_zero", "day_zero_close",
    "announced_local", "announced_utc", "announced_date", "timing", "day_zero_reason",
    "earnings_release", "year", "_row",
)  # fmt: skip


def settle_repeats(
    located: pd.DataFrame, headline: Window, policy: str = "keep_first"
) -> tuple[pd.DataFrame, StageLedger]:
    """Settle deals of one company whose headline windows share a session.

    Windows are held against that of the last event kept, so a third deal that meets only a second
    one, which fell, stands for itself. Among deals of one session the larger comes first, by
    ``deal_value`` where the list has it, then by identifier.

    Args:
        located: deal_id, security, position and the columns of the deal list.
        headline: the headline window.
        policy: ``keep_first`` drops the later deals; ``merge`` makes one event of them, at the
            first one's day zero, with the values summed and the features of the largest deal;
            ``keep_all`` keeps them, those of one session apart, whose price move is the same.

    Returns:
        The events kept, in the order given, and the stage's ledger.
    """
    facts = _Facts.of(located)
    groups = list(_groups(located, facts, len(headline)))
    if policy == "merge":
        kept = _merged(located, groups, facts)
        entries = [e for group in groups if group[1:] for e in _merge_entries(kept, group, facts)]
        return kept, StageLedger(STAGE, len(located), tuple(entries))
    entries = [
        _verdict(group, at, facts, len(headline), policy)
        for group in groups
        for at in range(1, len(group))
    ]
    gone = {entry.deal for entry in entries if entry.action is Action.DROPPED}
    kept = located[~located["deal_id"].astype(str).isin(gone)]
    return kept, StageLedger(STAGE, len(located), tuple(entries))


@dataclass(frozen=True, slots=True)
class _Facts:
    """By index label: each deal's name, session, and value, those not known below all others."""

    name: dict[int, str]
    position: dict[int, int]
    size: dict[int, float]

    @property
    def sizes(self) -> np.ndarray:
        """The values in the order of the labels."""
        return np.array(list(self.size.values()), dtype=np.float64)

    @classmethod
    def of(cls, located: pd.DataFrame) -> _Facts:
        labels = located.index.tolist()
        size = [-np.inf] * len(labels)
        if "deal_value" in located:
            size = located["deal_value"].fillna(-np.inf).tolist()
        columns = (located["deal_id"].astype(str).tolist(), located["position"].tolist(), size)
        return cls(*(dict(zip(labels, values, strict=True)) for values in columns))

    def largest(self, group: list[int]) -> int:
        """The deal of the greatest value; the first one where no value is known."""
        return max(group, key=lambda label: self.size[label])


def _groups(located: pd.DataFrame, facts: _Facts, length: int) -> Iterator[list[int]]:
    """Index labels of each event kept and, after it, of the deals that meet its window."""
    keys = located[["security", "position", "deal_id"]].assign(smaller=-facts.sizes)
    order = keys.sort_values(["security", "position", "smaller", "deal_id"])
    group: list[int] = []
    company, start = "", 0
    for label, security, position in order[["security", "position"]].itertuples():
        if group and security == company and position - start < length:
            group.append(label)
            continue
        if group:
            yield group
        group, company, start = [label], security, position
    if group:
        yield group


def _verdict(group: list[int], at: int, facts: _Facts, length: int, policy: str) -> LedgerEntry:
    """What becomes of the deal at place ``at`` of a group, which is not its first."""
    later, limit = group[at], f"{length} sessions"
    deal, position = facts.name[later], facts.position
    apart = position[later] - position[group[0]]
    twin = next(label for label in group if position[label] == position[later])
    if twin != later and (policy == "keep_all" or not apart):
        why = "which is larger" if facts.size[twin] > facts.size[later] else "which is named first"
        value = f"same session as {facts.name[twin]}, {why}"
        return LedgerEntry(deal, "overlapping_event", Action.DROPPED, value, limit)
    value = f"{apart} sessions after {facts.name[group[0]]}"
    if policy == "keep_all":
        return LedgerEntry(deal, "overlapping_kept", Action.FLAGGED, value, limit)
    return LedgerEntry(deal, "overlapping_event", Action.DROPPED, value, limit)


def _merged(located: pd.DataFrame, groups: list[list[int]], facts: _Facts) -> pd.DataFrame:
    """One row a group: the row of its largest deal, with the time and place of its first."""
    first = [group[0] for group in groups]
    kept = located.loc[[facts.largest(group) for group in groups]].set_axis(first)
    own = {name: located[name].loc[first] for name in located.columns if name in OF_THE_FIRST}
    kept = kept.assign(**own)
    if "deal_value" in located:
        group_of = {label: group[0] for group in groups for label in group}
        values = located["deal_value"].groupby(located.index.map(group_of)).sum(min_count=1)
        kept["deal_value"] = values
    events = set(first)
    return kept.loc[[label for label in located.index if label in events]]


def _merge_entries(kept: pd.DataFrame, group: list[int], facts: _Facts) -> Iterator[LedgerEntry]:
    first, *others = (facts.name[label] for label in group)
    told = [f"with {', '.join(others)}"]
    if "deal_value" in kept:
        told.append(f"deal value together {float(kept['deal_value'].loc[group[0]]):,g}")
    told.append(f"features of {facts.name[facts.largest(group)]}")
    yield LedgerEntry(first, "merged_event", Action.CHANGED, "; ".join(told), "one event")
    for name in others:
        yield LedgerEntry(name, "merged_event", Action.DROPPED, f"part of {first}", "one event")
