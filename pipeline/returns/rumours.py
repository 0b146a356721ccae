"""The other date of a deal: its rumour beside its announcement."""

from __future__ import annotations

import pandas as pd

from pipeline.core.ledger import Action, LedgerEntry

RUMOURED = "rumoured_date"


def first_public(deals: pd.DataFrame) -> pd.DataFrame:
    """The deals with the rumour in the place of the announcement, where there was one."""
    rumoured = deals[RUMOURED].notna()
    return deals.assign(
        announced_utc=deals["announced_utc"].where(~rumoured, deals["rumoured_utc"]),
        announced_date=deals["announced_date"].where(~rumoured, deals[RUMOURED]),
    )


def has_rumours(deals: pd.DataFrame) -> bool:
    """Whether a deal of the list was rumoured before it was announced."""
    return RUMOURED in deals and bool(deals[RUMOURED].notna().any())


def dated(deals: pd.DataFrame, earliest: bool) -> pd.DataFrame:
    """The deals as the study dates them: by the announcement, or by what was public first."""
    return first_public(deals) if earliest and has_rumours(deals) else deals


def moved(located: pd.DataFrame, other: pd.DataFrame) -> pd.DataFrame:
    """The deals whose other date gives another day zero, as placed by that date.

    Args:
        located, other: the deals placed by the study's date and by the other one.
    """
    before = located.set_index("deal_id")["position"]
    common = other[other["deal_id"].isin(before.index)]
    apart = common["position"].to_numpy() - before.loc[common["deal_id"]].to_numpy()
    different: pd.DataFrame = common.assign(_apart=apart)[apart != 0]
    return different


def rumour_entries(different: pd.DataFrame, earliest: bool) -> tuple[LedgerEntry, ...]:
    """A flag for each deal whose rumour was a session or more before its announcement."""
    used = "the rumour" if earliest else "the announcement"
    return tuple(
        LedgerEntry(
            str(deal),
            "rumour_before",
            Action.FLAGGED,
            f"rumour {abs(int(gap))} sessions before the announcement",
            f"day zero is that of {used}",
        )
        for deal, gap in zip(different["deal_id"], different["_apart"], strict=True)
    )


def with_day_zero(deals: pd.DataFrame, different: pd.DataFrame) -> pd.DataFrame:
    """The deals with exchange, column and position of ``different`` where it holds the deal."""
    names = [name for name in ("line", "exchange", "column", "position") if name in different]
    other = different.set_index("deal_id")[names]
    known = deals["deal_id"].isin(other.index).to_numpy()
    picked = other.reindex(deals.loc[known, "deal_id"])
    changed = deals.copy()
    for name in names:
        values = changed[name].to_numpy(copy=True)
        values[known] = picked[name].to_numpy()
        changed[name] = values
    return changed
