"""When the deals happened, how many share their sessions, and the mean without each of them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import pandas as pd

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.pictures import facts
from pipeline.core.prices import Integers
from pipeline.core.window import Window

Rows = list[dict[str, object]]


def calendar_of(days: pd.Series) -> Rows:
    """Deals by month, (year, month, deals); every month of every year from the first to the last.

    ``days`` holds the N dates of day zero.
    """
    dates = pd.DatetimeIndex(pd.to_datetime(days))
    counts = np.zeros((int(dates.year.max() - dates.year.min()) + 1, 12), dtype=np.int64)
    first = int(dates.year.min())
    np.add.at(counts, (dates.year.to_numpy() - first, dates.month.to_numpy() - 1), 1)
    return [
        {"year": first + year, "month": month + 1, "deals": int(counts[year, month])}
        for year in range(len(counts))
        for month in range(12)
    ]


def meeting(abnormal: AbnormalReturns, window: Window) -> Integers:
    """(N,) how many other deals' windows share a date with each deal's window.

    Windows meet if neither ends before the other begins: those that begin by the end of this one,
    less those that ended before it began.
    """
    days = abnormal.days[:, abnormal.columns(window)]
    first, last = days[:, 0], days[:, -1]
    begun = np.searchsorted(np.sort(first), last, side="right")
    over = np.searchsorted(np.sort(last), first, side="left")
    return np.asarray(begun - over - 1, dtype=np.int64)


def sharing_of(abnormal: AbnormalReturns, window: Window) -> Rows:
    """Deals by the number of other deals whose windows meet theirs: others, deals, share above."""
    others = meeting(abnormal, window)
    counts = np.bincount(others)
    above = (len(others) - np.cumsum(counts)) / len(others)
    return [
        {"others": at, "deals": int(counts[at]), "share_with_more": float(above[at])}
        for at in range(len(counts))
    ]


def means_left_out(
    abnormal: AbnormalReturns, window: Window, target: str, groups: Mapping[str, Sequence[str]]
) -> tuple[Rows, dict[str, float]]:
    """The mean CAR without each deal and each group, decimal.

    Args:
        abnormal, window: whose mean.
        target: what the mean is called.
        groups: dimension -> (N,) the group of each deal, in words.

    Returns:
        One row a deal and a group, those that move the mean most first; and its standard error
        s/√N, with deals as independent, by ``target``. Nothing with fewer than three deals.
    """
    car = abnormal.car(window)
    n = len(car)
    if n < 3:
        return [], {}
    rows: Rows = []
    for dimension, words in {"deal": abnormal.deals, **groups}.items():
        codes, names = pd.factorize(np.array(words, dtype=object))
        sizes = np.bincount(codes)
        totals = np.bincount(codes, weights=car)
        if len(names) < 2:
            continue
        without = (car.sum() - totals) / (n - sizes)
        change = without - car.mean()
        for at in np.argsort(-np.abs(change), kind="stable").tolist():
            rows.append(
                {
                    "target": target,
                    "dimension": dimension,
                    "group": str(names[at]),
                    "deals": int(sizes[at]),
                    "estimate": float(without[at]),
                    "change": float(change[at]),
                }
            )
    return rows, {target: float(car.std(ddof=1) / np.sqrt(n))}


def calendar_facts(calendar: Rows, sharing: Rows) -> Rows:
    """The busiest month and its deals, and the share of deals that meet another."""
    busiest = max(calendar, key=lambda row: int(str(row["deals"])))
    values = {name: float(str(busiest[name])) for name in ("year", "month", "deals")}
    found = {f"busiest_{name}": value for name, value in values.items()}
    return facts("calendar", {**found, "meeting": float(str(sharing[0]["share_with_more"]))})
