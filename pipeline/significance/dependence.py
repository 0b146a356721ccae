"""How alike the abnormal returns of different deals are on the same calendar dates."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.window import Window
from pipeline.significance.many_deals import DateLinks, date_links
from pipeline.significance.pairs import Links, pair_links

# Deals up to which each pair is held against the other: a second or two of work.
MOST_IN_PAIRS = 1_500
Known = Links | DateLinks


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


@lru_cache(maxsize=8)
def links(abnormal: AbnormalReturns) -> Known:
    """The links of all events of one model; made once and shared by its windows and checks.

    Pair by pair, and beyond ``MOST_IN_PAIRS`` deals by pairs of dates.
    """
    many = len(abnormal.deals) > MOST_IN_PAIRS
    return date_links(abnormal) if many else pair_links(abnormal)


def dependence(abnormal: AbnormalReturns, window: Window, known: Known | None = None) -> Dependence:
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
    met = known.meeting(abnormal.days[:, where])
    alike = np.where(np.isfinite(met.correlation), met.correlation, mean)
    possible = n * (n - 1)
    length = float(dates) / pairs if pairs else np.nan
    common = np.where(met.common > 0, met.common, length)
    squares = met.number * met.share**2
    return Dependence(
        mean=mean,
        weighted=2 * float((met.number * np.nan_to_num(alike) * met.share).sum()) / possible,
        pairs=pairs // 2,
        overlapping=2 * float(met.number.sum()) / possible,
        noise=float(np.sqrt(2 / (pairs * length))) if pairs else np.nan,
        dates=len(counts),
        largest=int(counts.max()),
        weighted_noise=2 * float(np.sqrt((squares / common).sum())) / possible,
    )
