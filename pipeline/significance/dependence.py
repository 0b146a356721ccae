"""How alike the abnormal returns of different deals are on the same calendar dates."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy import sparse

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.prices import Dates, Floats, Integers
from pipeline.core.window import Window

COMMON_DAYS = 30


@dataclass(frozen=True, slots=True, eq=False)
class Dependence:
    """Correlation of estimation-window abnormal returns and overlap of the event windows.

    Attributes:
        mean: average correlation over all pairs that share at least 30 dates; NaN without one.
        weighted: average over all pairs of correlation times overlap of the event windows.
        pairs: pairs that share at least 30 dates.
        overlapping: share of pairs whose event windows share a date.
        noise: what ``mean`` would scatter by if deals were independent.
        dates: distinct dates of day zero (or of the window's first day).
        largest: most deals on one such date.
    """

    mean: float
    weighted: float
    pairs: int
    overlapping: float
    noise: float
    dates: int
    largest: int

    def adjustment(self, n: int) -> float:
        """Kolari–Pynnönen's factor on a standardised t: sqrt((1 - r) / (1 + (n - 1) r)), r ≥ 0."""
        r = max(self.weighted, 0.0)
        return float(np.sqrt((1 - r) / (1 + (n - 1) * r)))

    def effective_n(self, n: int) -> float:
        """n / (1 + (n - 1) r): deals that independent ones would be worth."""
        return n / (1 + (n - 1) * max(self.weighted, 0.0))


@dataclass(frozen=True, slots=True, eq=False)
class Links:
    """(N, N) correlations over common estimation dates, and how many dates each pair shares."""

    correlation: Floats
    common: Floats

    def take(self, rows: Integers) -> Links:
        """The links among the events at ``rows``."""
        at = np.ix_(rows, rows)
        return Links(self.correlation[at], self.common[at])


@lru_cache(maxsize=8)
def links(abnormal: AbnormalReturns) -> Links:
    """The links of all events of one model; made once and shared by its windows and checks."""
    return Links(*pairwise(abnormal.estimation_returns, abnormal.estimation_days))


def dependence(abnormal: AbnormalReturns, window: Window, known: Links | None = None) -> Dependence:
    """Measure the dependence among N deals.

    Pairwise correlations are taken over common calendar dates, at least 30 of them (Kolari and
    Pynnönen 2010, RFS 23). The weighted mean multiplies each by the share of the event window
    that the two deals have in common, and is zero for deals whose windows do not meet; a pair
    that shares too few dates counts with the mean of the others. ``known`` are the links of
    these N deals, if they were made before.
    """
    n = len(abnormal.deals)
    where = abnormal.columns(window)
    starts = abnormal.days[:, where.start]
    _, counts = np.unique(starts, return_counts=True)
    if n < 2:
        return Dependence(np.nan, 0.0, 0, 0.0, np.nan, len(counts), int(counts.max(initial=0)))
    known = known or links(abnormal)
    usable = (known.common >= COMMON_DAYS) & np.isfinite(known.correlation)
    np.fill_diagonal(usable, False)
    pairs = int(usable.sum())
    mean = float(known.correlation[usable].mean()) if pairs else np.nan
    shared = overlap(abnormal.days[:, where])
    first, second = shared.coords
    meet = (first != second) & (shared.data > 0)
    first, second, share = first[meet], second[meet], shared.data[meet]
    alike = np.where(usable[first, second], known.correlation[first, second], mean)
    possible = n * (n - 1)
    length = float(known.common[usable].mean()) if pairs else np.nan
    return Dependence(
        mean=mean,
        weighted=float((np.nan_to_num(alike) * share).sum() / possible),
        pairs=pairs // 2,
        overlapping=len(share) / possible,
        noise=float(np.sqrt(2 / (pairs * length))) if pairs else np.nan,
        dates=len(counts),
        largest=int(counts.max()),
    )


def pairwise(returns: Floats, days: Dates) -> tuple[Floats, Floats]:
    """Correlations over common dates.

    Args:
        returns: (N, E) with NaN where unused.
        days: (N, E) ``datetime64[D]``.

    Returns:
        (N, N) correlations (NaN where undefined) and (N, N) numbers of common dates.
    """
    used = np.isfinite(returns) & ~np.isnat(days)
    dates, at = np.unique(days[used], return_inverse=True)
    n = len(returns)
    values = np.zeros((n, len(dates)))
    present = np.zeros((n, len(dates)))
    row = np.nonzero(used)[0]
    values[row, at] = returns[used]
    present[row, at] = 1.0
    count = present @ present.T
    total = values @ present.T
    square = (values**2) @ present.T
    with np.errstate(divide="ignore", invalid="ignore"):
        covariance = values @ values.T - total * total.T / count
        spread = square - total**2 / count
        correlation = covariance / np.sqrt(spread * spread.T)
    return np.clip(correlation, -1, 1), count


def overlap(days: Dates) -> sparse.coo_array:
    """(N, N) share of L event dates that two deals have in common, from (N, L) dates.

    Sparse: most deals of a long sample never meet.
    """
    n, length = days.shape
    known = ~np.isnat(days)
    dates, at = np.unique(days[known], return_inverse=True)
    cells = (np.ones(len(at)), (np.nonzero(known)[0], at))
    present = sparse.csr_array(cells, shape=(n, len(dates)))
    return sparse.coo_array(present @ present.T / length)
