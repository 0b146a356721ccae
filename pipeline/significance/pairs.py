"""How alike the estimation windows of deals are, pair by pair."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import sparse

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.prices import Dates, Floats, Integers

COMMON_DAYS = 30


@dataclass(frozen=True, slots=True, eq=False)
class Met:
    """Pairs of deals whose event windows share a date, in kinds of equal facts.

    Attributes:
        number: (K,) pairs of each kind, each counted once.
        share: (K,) of the event window that such a pair has in common.
        correlation: (K,) of their estimation windows; NaN where they share too few dates.
        common: (K,) dates that the estimation windows have in common; zero likewise.
    """

    number: Floats
    share: Floats
    correlation: Floats
    common: Floats


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

    def meeting(self, days: Dates) -> Met:
        """The pairs whose event windows, (n, L) ``days``, share a date."""
        shared = overlap(days)
        first = np.repeat(np.arange(len(days)), np.diff(shared.indptr))
        second = np.asarray(shared.indices, dtype=np.int64)
        meet = (first < second) & (shared.data > 0)
        first, second = first[meet], second[meet]
        alike, common = self.between(first, second), self.dates_between(first, second)
        return Met(np.ones(len(first)), shared.data[meet], alike, common)

    def between(self, first: Integers, second: Integers) -> Floats:
        """Correlations of pairs, by their places in ``rows``; NaN where they share too little."""
        return np.asarray(self.correlation[self.rows[first], self.rows[second]])

    def dates_between(self, first: Integers, second: Integers) -> Floats:
        """Common dates of pairs, by their places in ``rows``; zero where they share too few."""
        return np.asarray(self.common[self.rows[first], self.rows[second]])


def pair_links(abnormal: AbnormalReturns) -> Links:
    """The links of N deals; time and memory grow with N²."""
    correlation, common = pairwise(abnormal.estimation_returns, abnormal.estimation_days)
    usable = (common >= COMMON_DAYS) & np.isfinite(correlation)
    np.fill_diagonal(usable, False)
    correlation, common = np.where(usable, correlation, np.nan), np.where(usable, common, 0.0)
    sums = np.stack([usable.sum(axis=1), np.nansum(correlation, axis=1), common.sum(axis=1)])
    return Links(correlation, common, sums, np.arange(len(common)))


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
