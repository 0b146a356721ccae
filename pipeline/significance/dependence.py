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
        weighted_noise: what ``weighted`` would scatter by if deals were independent, or NaN.
    """

    mean: float
    weighted: float
    pairs: int
    overlapping: float
    noise: float
    dates: int
    largest: int
    weighted_noise: float = np.nan

    def adjustment(self, n: int) -> float:
        """Kolari–Pynnönen's factor on a standardised t: sqrt((1 - r) / (1 + (n - 1) r)), r ≥ 0."""
        r = max(self.weighted, 0.0)
        return float(np.sqrt((1 - r) / (1 + (n - 1) * r)))

    def effective_n(self, n: int) -> float:
        """n / (1 + (n - 1) r): deals that independent ones would be worth."""
        return n / (1 + (n - 1) * max(self.weighted, 0.0))


@dataclass(frozen=True, slots=True, eq=False)
class Links:
    """How alike the estimation windows of n deals are; a part looks into the tables of all N.

    Attributes:
        correlation: (N, N) over common dates; NaN for a pair that shares fewer than 30, and on
            the diagonal.
        common: (N, N) dates that a pair shares; zero likewise.
        sums: (3, N) of each row: pairs, correlations and common dates.
        rows: (n,) the deals meant, each once.
    """

    correlation: Floats
    common: Floats
    sums: Floats
    rows: Integers

    def take(self, rows: Integers) -> Links:
        """The links among the deals at ``rows``."""
        return Links(self.correlation, self.common, self.sums, self.rows[rows])

    def totals(self) -> Floats:
        """(3,) pairs, each counted from both sides, their correlations and common dates, summed.

        From the deals left out where these are the fewer.
        """
        everyone = self.sums.shape[1]
        if 2 * len(self.rows) < everyone:
            return self._block(self.rows)
        gone = np.delete(np.arange(everyone), self.rows)
        total = self.sums.sum(axis=1) - 2 * self.sums[:, gone].sum(axis=1)
        return np.asarray(total + self._block(gone))

    def _block(self, rows: Integers) -> Floats:
        at = np.ix_(rows, rows)
        common = self.common[at]
        return np.array([(common > 0).sum(), np.nansum(self.correlation[at]), common.sum()])

    def between(self, first: Integers, second: Integers) -> Floats:
        """Correlations of pairs, by their places in ``rows``; NaN where they share too little."""
        return np.asarray(self.correlation[self.rows[first], self.rows[second]])

    def dates_between(self, first: Integers, second: Integers) -> Floats:
        """Common dates of pairs, by their places in ``rows``; zero where they share too few."""
        return np.asarray(self.common[self.rows[first], self.rows[second]])


@lru_cache(maxsize=8)
def links(abnormal: AbnormalReturns) -> Links:
    """The links of all events of one model; made once and shared by its windows and checks."""
    correlation, common = pairwise(abnormal.estimation_returns, abnormal.estimation_days)
    usable = (common >= COMMON_DAYS) & np.isfinite(correlation)
    np.fill_diagonal(usable, False)
    correlation, common = np.where(usable, correlation, np.nan), np.where(usable, common, 0.0)
    sums = np.stack([usable.sum(axis=1), np.nansum(correlation, axis=1), common.sum(axis=1)])
    return Links(correlation, common, sums, np.arange(len(common)))


def dependence(abnormal: AbnormalReturns, window: Window, known: Links | None = None) -> Dependence:
    """Measure the dependence among N deals.

    Pairwise correlations are taken over common calendar dates, at least 30 of them (Kolari and
    Pynnönen 2010, RFS 23). The weighted mean multiplies each by the share of the event window
    that the two deals have in common, and is zero for deals whose windows do not meet; a pair
    that shares too few dates counts with the mean of the others. ``known`` are the links of
    these N deals, if they were made before.

    Correlations over T dates of independent deals scatter by 1 / sqrt(T) and are uncorrelated
    between pairs, so a mean of them over N (N - 1) ordered pairs with weights w scatters by
    sqrt(2 sum w² / T) / (N (N - 1)).
    """
    n = len(abnormal.deals)
    where = abnormal.columns(window)
    starts = abnormal.days[:, where.start]
    _, counts = np.unique(starts, return_counts=True)
    if n < 2:
        return Dependence(np.nan, 0.0, 0, 0.0, np.nan, len(counts), int(counts.max(initial=0)))
    known = known or links(abnormal)
    found, correlations, dates = known.totals()
    pairs = round(float(found))
    mean = float(correlations) / pairs if pairs else np.nan
    shared = overlap(abnormal.days[:, where])
    first = np.repeat(np.arange(n), np.diff(shared.indptr))
    second = np.asarray(shared.indices, dtype=np.int64)
    meet = (first < second) & (shared.data > 0)
    first, second, share = first[meet], second[meet], shared.data[meet]
    alike = known.between(first, second)
    alike = np.where(np.isfinite(alike), alike, mean)
    possible = n * (n - 1)
    length = float(dates) / pairs if pairs else np.nan
    common = known.dates_between(first, second)
    common = np.where(common > 0, common, length)
    return Dependence(
        mean=mean,
        weighted=2 * float((np.nan_to_num(alike) * share).sum()) / possible,
        pairs=pairs // 2,
        overlapping=2 * len(share) / possible,
        noise=float(np.sqrt(2 / (pairs * length))) if pairs else np.nan,
        dates=len(counts),
        largest=int(counts.max()),
        weighted_noise=2 * float(np.sqrt((share**2 / common).sum())) / possible,
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


def overlap(days: Dates) -> sparse.csr_array:
    """(N, N) share of L event dates that two deals have in common, from (N, L) dates.

    Sparse: most deals of a long sample never meet.
    """
    n, length = days.shape
    known = ~np.isnat(days)
    dates, at = np.unique(days[known], return_inverse=True)
    ends = np.concatenate([[0], np.cumsum(known.sum(axis=1))])
    present = sparse.csr_array((np.ones(len(at)), at, ends), shape=(n, len(dates)))
    return sparse.csr_array(present @ present.T / length)
