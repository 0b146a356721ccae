"""How alike the returns of many deals are: by pairs of dates instead of pairs of deals."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import sparse

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.prices import Dates, Floats, Integers
from pipeline.core.sessions import SessionRuns
from pipeline.significance.pairs import COMMON_DAYS, Met

CHUNK = 20_000


@dataclass(frozen=True, slots=True, eq=False)
class DateLinks:
    """How alike the estimation windows of n deals are, known for dates and not for single pairs.

    Deals whose estimation windows end on one date are taken together. The correlation of a pair
    is the mean product of their returns on the dates in common, each standardised over its own
    window; what is known of two dates is its average over their pairs of deals, a pair weighing by
    the dates it has in common. Time and memory grow with the deals and the pairs of dates, not with
    the pairs of deals.

    Attributes:
        key: (K,) two dates that hold pairs with 30 common days on average, as first * G + second,
            first <= second, in order.
        correlation: (K,) of such pairs, on average.
        common: (K,) days that such a pair has in common, on average.
        date: (P,) which of G dates each part ends on; a part is the deals that have all their
            sessions in common.
        part: (N,) which of P parts each deal belongs to.
        rows: (n,) the deals meant, each once.
    """

    key: Integers
    correlation: Floats
    common: Floats
    date: Integers
    part: Integers
    rows: Integers

    def take(self, rows: Integers) -> DateLinks:
        """The links among the deals at ``rows``."""
        known = self.key, self.correlation, self.common, self.date, self.part
        return DateLinks(*known, self.rows[rows])

    def totals(self) -> Floats:
        """(3,) pairs, each counted from both sides, their correlations and common dates, summed."""
        pairs = 2 * _pairs(self._deals(), self.key)
        alike, days = (pairs * self.correlation).sum(), (pairs * self.common).sum()
        return np.array([pairs.sum(), alike, days])

    def meeting(self, days: Dates) -> Met:
        """The pairs of dates whose event windows, (n, L) ``days``, meet.

        The share of the window that their deals have in common is an average too.
        """
        parts, at, deals = np.unique(self.part[self.rows], return_index=True, return_counts=True)
        known = ~np.isnat(days[at])
        column = (days[at] - days[at][known].min()).astype(np.int64)
        date = np.broadcast_to(self.date[parts][:, None], column.shape)
        weight = np.broadcast_to(deals[:, None].astype(np.float64), column.shape)
        groups = int(self.date.max()) + 1
        present = _table(weight[known], date[known], column[known], groups)
        key, shared = _products(present)
        own = key // groups == key % groups
        shared[own] = (shared[own] - present.sum(axis=1)[key[own] // groups]) / 2
        number = _pairs(self._deals(), key)
        kept = (number > 0) & (shared > 0)
        key, number, shared = key[kept], number[kept], shared[kept]
        correlation = _found(self.key, self.correlation, key, np.nan)
        share = shared / (number * days.shape[1])
        return Met(number, share, correlation, _found(self.key, self.common, key, 0.0))

    def _deals(self) -> Floats:
        """(G,) deals of each date among those meant."""
        date = self.date[self.part[self.rows]]
        return np.bincount(date, minlength=int(self.date.max()) + 1).astype(np.float64)


def date_links(abnormal: AbnormalReturns) -> DateLinks:
    """The links of N deals from N estimation windows; time and memory grow with N."""
    runs = abnormal.estimation_sessions
    places, part = np.unique(np.stack([runs.calendar, runs.first]), axis=1, return_inverse=True)
    part = part.ravel()
    column = _columns(runs, places)
    _, date = np.unique(column.max(axis=1, initial=-1), return_inverse=True)
    groups = int(date.max()) + 1
    totals, present, squares = _sums(abnormal.estimation_returns, part, places.shape[1])
    known = (column >= 0) & (present > 0)
    row = np.broadcast_to(date[:, None], column.shape)[known]
    z, counts, own = (
        _table(item[known], row, column[known], groups) for item in (totals, present, squares)
    )
    key, days = _products(counts)
    key_z, alike = _products(z)
    alike = _found(key_z, alike, key, 0.0)
    same = key // groups == key % groups
    at = key[same] // groups
    days[same] = (days[same] - counts.sum(axis=1)[at]) / 2
    alike[same] = (alike[same] - own.sum(axis=1)[at]) / 2
    pairs = _pairs(np.bincount(date[part], minlength=groups).astype(np.float64), key)
    kept = days >= COMMON_DAYS * np.maximum(pairs, 1)
    key, days, alike, pairs = key[kept], days[kept], alike[kept], pairs[kept]
    correlation = np.clip(alike / days, -1, 1)
    return DateLinks(key, correlation, days / pairs, date, part, np.arange(len(part)))


def _columns(runs: SessionRuns, places: Integers) -> Integers:
    """(P, E) places of the sessions of P parts among all dates of all calendars; -1 outside.

    ``places`` (2, P) are each part's calendar and first session.
    """
    dates = np.unique(np.concatenate(runs.calendars))
    column = np.full((places.shape[1], runs.length), -1, dtype=np.int64)
    for at, sessions in enumerate(runs.calendars):
        parts = np.flatnonzero(places[0] == at)
        run = places[1][parts, None] + np.arange(runs.length)
        exists = (run >= 0) & (run < len(sessions))
        where = np.searchsorted(dates, sessions)[np.clip(run, 0, len(sessions) - 1)]
        column[parts] = np.where(exists, where, -1)
    return column


def _sums(returns: Floats, part: Integers, parts: int) -> tuple[Floats, Floats, Floats]:
    """(P, E) of each part's returns, standardised a deal: their sum, number and sum of squares."""
    out = np.zeros((3, parts, returns.shape[1]))
    order = np.argsort(part, kind="stable")
    for begin in range(0, len(order), CHUNK):
        rows = order[begin : begin + CHUNK]
        z, used = _standardised(returns[rows])
        starts = np.flatnonzero(np.diff(part[rows], prepend=-1))
        at = part[rows][starts]
        for total, item in zip(out, (z, used, z**2), strict=True):
            total[at] += np.add.reduceat(item, starts, axis=0)
    return out[0], out[1], out[2]


def _standardised(returns: Floats) -> tuple[Floats, Floats]:
    """(n, E) deviations over their root mean square, zero where unused; and 1 where used."""
    used = np.isfinite(returns)
    number = np.maximum(used.sum(axis=1, keepdims=True), 1)
    values = np.where(used, returns, 0.0)
    values = np.where(used, values - values.sum(axis=1, keepdims=True) / number, 0.0)
    norm = np.sqrt((values**2).sum(axis=1, keepdims=True) / number)
    moves = norm > 0
    return values / np.where(moves, norm, 1.0), (used & moves).astype(np.float64)


def _table(weight: Floats, row: Integers, column: Integers, rows: int) -> sparse.csr_array:
    """A sparse table of ``rows`` rows; what falls on one place is added up."""
    shape = (rows, int(column.max(initial=-1)) + 1)
    return sparse.csr_array(sparse.coo_array((weight, (row, column)), shape=shape))


def _products(table: sparse.csr_array) -> tuple[Integers, Floats]:
    """Products of the rows of a (G, T) table with one another, as keys in order, and values."""
    made = sparse.coo_array(sparse.triu(table @ table.T))
    key = made.row.astype(np.int64) * table.shape[0] + made.col
    order = np.argsort(key)
    return key[order], np.asarray(made.data, dtype=np.float64)[order]


def _pairs(deals: Floats, key: Integers) -> Floats:
    """Pairs of deals of two dates, each counted once; within a date n (n - 1) / 2."""
    first, second = key // len(deals), key % len(deals)
    same = first == second
    return np.where(same, deals[first] * (deals[first] - 1) / 2, deals[first] * deals[second])


def _found(keys: Integers, values: Floats, wanted: Integers, default: float) -> Floats:
    """The values of the keys wanted; ``default`` for one that is not there."""
    if not len(keys):
        return np.full(len(wanted), default)
    at = np.minimum(np.searchsorted(keys, wanted), len(keys) - 1)
    return np.where(keys[at] == wanted, values[at], default)
