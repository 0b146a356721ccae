"""How long the price history is around the deals: what windows it allows."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from pipeline.drafting.kinds import Recognised
from pipeline.drafting.signs import dated

WANTED, GAP, FEWEST = (-250, -31), 30, 120
SHORT_GAP, LEAST = 10, 30
SECONDARY = ((0, 1), (-2, 2), (-5, 5), (-10, 10))
ALMOST_ALL = 0.1
DAILY = 4.0


@dataclass(frozen=True, slots=True)
class History:
    """Sessions with prices before and after the deals.

    Attributes:
        before, after: that nine deals in ten have at least.
        deals, priced: deals of the list, and those whose company has prices.
        gap: median days between two dates of one company.
    """

    before: int
    after: int
    deals: int
    priced: int
    gap: float


def history_of(deals: Recognised, prices: Recognised) -> History:
    """The history of the companies' own prices around each deal."""
    frame = prices.found.frame
    date_column = prices.column("date")
    days = dated(frame[date_column], prices.found.signs[date_column].dating)
    codes = frame[prices.column("security")].astype(str).str.strip()
    by_company = {
        str(code): np.sort(part.dropna().to_numpy()) for code, part in days.groupby(codes)
    }
    listed, column = deals.found.frame, deals.column("announced_at")
    when = dated(listed[column], deals.found.signs[column].dating)
    firms = listed[deals.column("security")].astype(str).str.strip()
    before, after = [], []
    for firm, day in zip(firms, when, strict=True):
        if firm in by_company and not pd.isna(day):
            own = by_company[firm]
            at = int(np.searchsorted(own, np.datetime64(day)))
            before.append(at)
            after.append(len(own) - at - 1)
    gaps = [np.median(np.diff(own)) / np.timedelta64(1, "D")
            for own in by_company.values() if len(own) > 1]  # fmt: skip
    return History(
        _lower(before), _lower(after), len(listed), len(before),
        float(np.median(gaps)) if gaps else float("nan"),
    )  # fmt: skip


def _lower(counts: list[int]) -> int:
    """What nine in ten reach."""
    return int(np.quantile(counts, ALMOST_ALL, method="lower")) if counts else 0


@dataclass(frozen=True, slots=True)
class Windows:
    """Proposed windows in sessions, and why."""

    estimation: tuple[int, int]
    minimum: int
    headline: tuple[int, int]
    secondary: tuple[tuple[int, int], ...]
    run_up: tuple[int, int] | None
    reason: str


def windows_of(history: History) -> Windows | None:
    """The windows that the history allows; None if it is too short for any estimate."""
    returns = history.before - 1  # the first price has no return before it
    if returns >= -WANTED[0]:
        estimation, minimum, gap = WANTED, FEWEST, GAP
        reason = (
            f"Nine deals in ten have {history.before} sessions of prices before them, so the usual "
            "window of about a year that ends a month before the deal fits."
        )
    else:
        gap = GAP if returns - GAP >= FEWEST else SHORT_GAP
        length = returns - gap
        if length < LEAST:
            return None
        estimation, minimum = (-returns, -(gap + 1)), max(LEAST, min(FEWEST, length * 4 // 5))
        reason = (
            f"Nine deals in ten have only {history.before} sessions of prices before them, so the "
            f"window takes what there is and ends {gap} sessions before the deal."
        )
    secondary = tuple(
        (start, end)
        for start, end in SECONDARY
        if start > estimation[1] and end <= max(1, history.after)
    )
    first = min(-1, *(start for start, _ in secondary)) if secondary else -1
    start, end = first - 32, first - 2
    run_up = (start, end) if returns >= -start else None
    return Windows(estimation, minimum, (-1, 1), secondary, run_up, reason)
