"""Rank and sign tests, which need no normal returns."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from pipeline.core.estimate import NotApplicable, Tested, t_test, z_test
from pipeline.core.prices import Booleans, Floats, Integers
from pipeline.significance.sample import CarSample, Series

NULL = "the mean cumulative abnormal return is zero"
MEDIAN_NULL = "abnormal returns are as often above zero as before the announcement"
NO_SERIES = "needs the daily series of the estimation windows"
FEW = "needs at least two deals"
ALIKE = "needs deals whose returns differ"
# Few enough rows to stay in the processor's cache while they are sorted.
ROWS = 256
MISSING = np.finfo(np.float64).max


def rank(sample: CarSample) -> Tested:
    """Corrado's rank test, summed over the window (Corrado 1989, JFE 23; Cowan 1992, RQFA 2).

    K_it is the rank of AR_it among the deal's estimation and window days over (T_i + 1), mid-ranks
    for ties; U_t = mean_i (K_it - 1/2); Z = sum over the window of U_t / (sqrt(L) S) with
    S² = mean over all days of (n_t / n) U_t². Standard normal.
    """
    name = "Rank Z"
    if sample.series is None or sample.n < 2:
        return NotApplicable(name, NO_SERIES if sample.n > 1 else FEW)
    return z_test(
        name,
        NULL,
        _rank_z(*sample.series.alike()),
        caution="rejects too often when variance rises at the event, 8% at a nominal 5% where it "
        "doubles; loses power as the window grows",
        citation="Corrado 1989; Cowan 1992",
    )


def rank_event_variance(sample: CarSample) -> Tested:
    """The rank test of returns standardised for a change of variance at the event.

    Corrado and Zivney 1992, JFQA 27: returns over their residual standard deviation, those of an
    event day also over the deals' cross-sectional standard deviation that day; then as
    :func:`rank`.
    """
    name = "Rank Z, event variance"
    if sample.series is None or sample.n < 2:
        return NotApplicable(name, NO_SERIES if sample.n > 1 else FEW)
    before, event = (part / sample.series.residual_sd[:, None] for part in sample.series.alike())
    traded = np.isfinite(event).sum(axis=0)
    if (traded < 2).any():
        return NotApplicable(name, "needs two deals that traded on each day of the window")
    spread = np.nanstd(event, axis=0, ddof=1)
    if not (spread > 0).all():
        return NotApplicable(name, ALIKE)
    return z_test(
        name,
        NULL,
        _rank_z(before, event / spread),
        caution="rejects too often when returns are skewed, 18% at a nominal 5% where they are "
        "exponential; loses power as the window grows",
        citation="Corrado and Zivney 1992; Cowan 1992",
    )


def _rank_z(before: Floats, event: Floats) -> float:
    """The window's summed mean rank over its time-series error, from (n, E) and (n, L) returns."""
    mean, weight = mean_rank(before, event)
    length = event.shape[1]
    spread = np.sqrt(np.nansum(weight * mean**2) / np.isfinite(mean).sum())
    return float(np.nansum(mean[-length:]) / (np.sqrt(length) * spread))


def mean_rank(*parts: Floats) -> tuple[Floats, Floats]:
    """(T,) mean over deals of the centred rank, and (T,) share of deals with a return that day.

    The rank of each return of a deal among all its returns, from 1, mid-ranks for ties, over
    their number plus one, less a half; NaN returns have none. ``parts`` are (n, T1), (n, T2), ...
    returns of the same n deals, T days in all.
    """
    n, days = len(parts[0]), sum(part.shape[1] for part in parts)
    count, total = np.zeros(days), np.zeros(days)
    for at in range(0, n, ROWS):
        returns = np.hstack([part[at : at + ROWS] for part in parts])
        present = np.isfinite(returns)
        count += len(returns) if present.all() else present.sum(axis=0)
        total += _summed_ranks(returns, present)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.where(count > 0, total / count - 0.5, np.nan), count / n


def _summed_ranks(returns: Floats, present: Booleans) -> Floats:
    """(T,) sum over the rows of the ranks, each over its row's number of returns plus one."""
    days = returns.shape[1]
    known = np.full((len(returns), 1), float(days))
    if not present.all():
        known = present.sum(axis=1, keepdims=True, dtype=np.float64)
        returns = np.where(present, returns, MISSING)
    order, close = _order(returns, known)
    place = np.arange(1.0, days + 1)
    ranks = place / (known + 1)
    if not present.all():
        ranks[place > known] = 0.0
    ranks[close] = 0.0
    total = np.bincount(order.ravel(), ranks.ravel(), days)
    if close.any():
        from scipy import stats

        ranks = stats.rankdata(returns[close], axis=1) / (known[close] + 1)
        total += np.where(present[close], ranks, 0.0).sum(axis=0)
    return np.asarray(total)


def _order(values: Floats, known: Floats) -> tuple[Integers, Booleans]:
    """Each row's days from the smallest value to the greatest, and whether two are too close.

    A value whose last bits give way to the number of its day carries the day along when the row
    is sorted, which is twice as fast as sorting indices. Rows with two values that differ in those
    last bits only, ties among them, must be ranked another way.

    Args:
        values: (n, T), the greatest there is where missing.
        known: (n, 1) values that are not missing.

    Returns:
        (n, T) days and (n,) rows to rank another way.
    """
    days = values.shape[1]
    last = (1 << days.bit_length()) - 1
    # Adding zero makes one zero of the two.
    packed = values + 0.0
    bits = packed.view(np.int64)
    bits &= ~last
    bits |= np.arange(days)
    packed.sort(axis=1)
    same = (bits[:, 1:] ^ bits[:, :-1]).view(np.uint64) <= last
    if (known < days).any():
        same &= np.arange(1.0, days) < known
    return bits & last, np.asarray(same.any(axis=1))


def generalised_rank(sample: CarSample) -> Tested:
    """GRANK-T: the window's cumulated return ranked among the estimation days.

    Kolari and Pynnönen 2011, JEF 18. z_i = SCAR_i / s(SCAR) stands as one more day beside the
    standardised estimation returns; U_it = rank / (T + 1) - 1/2 with T = L1 + 1;
    Z = mean U_0 / S, S² = mean over the T days of (n_t / n) U_t²;
    t = Z sqrt((T - 2) / (T - 1 - Z²)), t(T - 2).
    """
    name = "Generalised rank t"
    if sample.series is None or sample.n < 2:
        return NotApplicable(name, NO_SERIES if sample.n > 1 else FEW)
    if not sample.scar.std(ddof=1) > 0:
        return NotApplicable(name, ALIKE)
    mean, weight = mean_rank(*_cumulated(sample, sample.series))
    days = int(np.isfinite(mean).sum())
    spread = np.sqrt(np.nansum(weight * mean**2) / days)
    z = float(mean[-1] / spread)
    room = days - 1 - z**2
    if room <= 0:
        return NotApplicable(name, "every deal ranks at the end of its estimation days")
    return t_test(
        name,
        NULL,
        z * float(np.sqrt((days - 2) / room)),
        days - 2,
        caution="rejects too often when returns are skewed and the window has several days",
        citation="Kolari and Pynnönen 2011",
    )


def generalised_rank_z(sample: CarSample) -> Tested:
    """GRANK-Z: the generalised rank against its variance among independent deals.

    Kolari and Pynnönen 2011, JEF 18. U_i0 is uniform on 1, ..., T over T + 1, less a half, so
    Z = mean U_0 / sqrt(mean_i((T_i - 1) / (T_i + 1)) / (12 n)), standard normal; T_i - 1 returns
    of deal i's estimation window.
    """
    name = "Generalised rank Z"
    if sample.series is None or sample.n < 2:
        return NotApplicable(name, NO_SERIES if sample.n > 1 else FEW)
    if not sample.scar.std(ddof=1) > 0:
        return NotApplicable(name, ALIKE)
    before, cumulated = _cumulated(sample, sample.series)
    mean, _ = mean_rank(before, cumulated)
    days = np.isfinite(before).sum(axis=1) + 1
    variance = float(((days - 1) / (days + 1)).mean()) / (12 * sample.n)
    return z_test(
        name,
        NULL,
        float(mean[-1] / np.sqrt(variance)),
        caution="assumes independent deals; rejects too often when returns are skewed and the "
        "window has several days",
        citation="Kolari and Pynnönen 2011",
    )


def _cumulated(sample: CarSample, series: Series) -> tuple[Floats, Floats]:
    """(n, E) standardised estimation returns and (n, 1) SCARs over their standard deviation."""
    before = series.alike()[0] / series.residual_sd[:, None]
    return before, (sample.scar / sample.scar.std(ddof=1))[:, None]


def generalised_sign(sample: CarSample) -> Tested:
    """Z = (w - n p) / sqrt(n p (1 - p)), w deals above zero (Cowan 1992, RQFA 2).

    p is the mean share of estimation-window returns above zero; for a window of L days, of
    rolling L-day sums, so that skewness of daily returns does not enter.
    """
    name = "Generalised sign Z"
    if sample.series is None:
        return NotApplicable(name, NO_SERIES)
    if sample.n < 2:
        return NotApplicable(name, FEW)
    sums = rolling_sums(sample.series.estimation, sample.series.event.shape[1])
    used = np.isfinite(sums)
    share = float((((sums > 0) & used).sum(axis=1) / used.sum(axis=1)).mean())
    if not 0 < share < 1:
        return NotApplicable(name, "the estimation windows hold returns of one sign only")
    above = float((sample.car > 0).sum())
    statistic = (above - sample.n * share) / np.sqrt(sample.n * share * (1 - share))
    return z_test(
        name,
        MEDIAN_NULL,
        float(statistic),
        caution="assumes that deals are independent of one another",
        citation="Cowan 1992",
        facts={"above_zero": above, "share_before": share},
    )


def rolling_sums(returns: Floats, length: int) -> Floats:
    """(n, E - L + 1) sums over L consecutive days; NaN where a day is missing."""
    width = returns.shape[1] - length + 1
    total = returns[:, :width].copy()
    for at in range(1, length):
        total += returns[:, at : at + width]
    return total


def signed_rank(sample: CarSample) -> Tested:
    """Wilcoxon's signed-rank test of the CARs, zeros left out, ties with mid-ranks.

    Wilcoxon 1945, Biometrics Bulletin 1. Exact up to 25 deals without ties, else normal with the
    correction of the variance for ties.
    """
    from scipy import stats

    name = "Signed-rank test"
    car = sample.car[sample.car != 0]
    if len(car) < 2:
        return NotApplicable(name, FEW)
    ties = len(np.unique(np.abs(car))) < len(car)
    exact = len(car) <= 25 and not ties
    n = len(car)
    ranks = stats.rankdata(np.abs(car))
    positive = float(ranks[car > 0].sum())
    _, counts = np.unique(ranks, return_counts=True)
    variance = n * (n + 1) * (2 * n + 1) / 24 - ((counts**3 - counts).sum()) / 48
    z = (positive - n * (n + 1) / 4) / np.sqrt(variance)
    result = z_test(
        name,
        "cumulative abnormal returns are symmetric about zero",
        float(z),
        caution="rejects too often when returns are skewed; assumes independent deals",
        citation="Wilcoxon 1945",
        facts={"positive_rank_sum": positive},
    )
    if not exact:
        return result
    found = stats.wilcoxon(car, method="exact")
    return replace(result, p_value=float(found.pvalue), distribution="exact")
