"""Tests whose distribution comes from the sample itself."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from pipeline.core.estimate import NotApplicable, Tested, TestResult
from pipeline.core.prices import Floats
from pipeline.significance.ranks import rolling_sums
from pipeline.significance.sample import CarSample

NULL = "the mean cumulative abnormal return is zero"
DRAWS = 1999
HANDFUL = 5
FEWEST = 6
# Returns drawn at a time, so that many deals do not fill the memory.
CELLS = 1_000_000


def skewness_adjusted(sample: CarSample) -> Tested:
    """Johnson's t with bootstrapped critical values (Lyon, Barber and Tsai 1999, JF 54).

    S = mean / s, g the skewness: t = sqrt(n) (S + g S²/3 + g/(6n)). Draws of n/4 deals give the
    distribution of the same statistic about the sample's own mean; p is twice the smaller tail.
    """
    name = "Skewness-adjusted t"
    if sample.n < 20:
        return NotApplicable(name, "needs at least 20 deals, so that a quarter of them is a sample")
    return _bootstrapped(
        name, sample, johnson, sample.n // 4, "Johnson 1978; Lyon, Barber and Tsai 1999"
    )


def skewness_transformed(sample: CarSample) -> Tested:
    """Hall's transformed t with bootstrapped critical values (Hall 1992, JRSS B 54).

    S = mean / s, g the skewness: t = sqrt(n) (S + g S²/3 + g² S³/27 + g/(6n)), which rises with
    the mean everywhere, as Johnson's does not. Draws of n deals; p is twice the smaller tail.
    """
    name = "Skewness-transformed t"
    if sample.n < 20:
        return NotApplicable(name, "needs at least 20 deals, so that their skewness is known")
    return _bootstrapped(name, sample, hall, sample.n, "Hall 1992")


def deal_bootstrap(sample: CarSample) -> Tested:
    """Studentised bootstrap of independent deals (Efron and Tibshirani 1993, ch. 16.4).

    t* = (mean* - mean) / (s* / sqrt(n)) of draws of n deals; p is the share of draws whose t* is
    at least as large in size.
    """
    name = "Bootstrap t by deal"
    if sample.n < FEWEST:
        return NotApplicable(name, f"needs at least {FEWEST} deals")
    return _bootstrapped(
        name, sample, student, sample.n, "Efron and Tibshirani 1993", symmetric=True
    )


def _bootstrapped(
    name: str,
    sample: CarSample,
    statistic: Callable[[Floats, float], Floats],
    size: int,
    citation: str,
    symmetric: bool = False,
) -> Tested:
    """A statistic of the CARs about zero among those of draws of ``size`` about their mean."""
    if not sample.car.std(ddof=1) > 0:
        return NotApplicable(name, "needs deals whose returns differ")
    # Drawn from the deals in order of size, the mean above zero, so that neither the order of
    # the deals nor the sign of the question changes the draws.
    side = 1.0 if sample.car.mean() >= 0 else -1.0
    car = np.sort(side * sample.car)
    found = float(statistic(car[None, :], 0.0)[0])
    null = _null(car, statistic, size, sample.seed)
    if symmetric:
        p = (1 + (np.abs(null) >= abs(found) - 1e-12).sum()) / (len(null) + 1)
    else:
        tail = min((null <= found).sum(), (null >= found).sum())
        p = min(1.0, 2 * (1 + tail) / (len(null) + 1))
    return TestResult(
        name,
        NULL,
        side * found,
        "bootstrap",
        float(p),
        caution="assumes that deals are independent of one another",
        citation=citation,
        facts={"draws": float(len(null))},
    )


def _null(
    car: Floats, statistic: Callable[[Floats, float], Floats], size: int, seed: int
) -> Floats:
    """The statistic about the mean of ``car``, in each of the draws whose returns differ."""
    stream, centre = np.random.default_rng(seed), float(car.mean())
    rows = max(1, CELLS // size)
    parts = []
    for at in range(0, DRAWS, rows):
        draws = car[stream.integers(0, len(car), (min(rows, DRAWS - at), size))]
        parts.append(statistic(draws[draws.std(axis=1, ddof=1) > 0], centre))
    return np.concatenate(parts)


def student(samples: Floats, centre: float) -> Floats:
    """(B,) t of (B, m) samples about ``centre``."""
    m = samples.shape[1]
    return np.asarray(np.sqrt(m) * (samples.mean(axis=1) - centre) / samples.std(axis=1, ddof=1))


def johnson(samples: Floats, centre: float) -> Floats:
    """(B,) Johnson's (1978) statistic of (B, m) samples about ``centre``."""
    m = samples.shape[1]
    ratio, skew = _moments(samples, centre)
    return np.asarray(np.sqrt(m) * (ratio + skew * ratio**2 / 3 + skew / (6 * m)))


def hall(samples: Floats, centre: float) -> Floats:
    """(B,) Hall's (1992) statistic of (B, m) samples about ``centre``."""
    m = samples.shape[1]
    ratio, skew = _moments(samples, centre)
    return np.asarray(johnson(samples, centre) + np.sqrt(m) * skew**2 * ratio**3 / 27)


def _moments(samples: Floats, centre: float) -> tuple[Floats, Floats]:
    """(B,) mean less ``centre`` over the standard deviation, and (B,) skewness."""
    m = samples.shape[1]
    mean = samples.mean(axis=1)
    spread = samples.std(axis=1, ddof=1)
    apart = samples - mean[:, None]
    skew = (apart * apart * apart).sum(axis=1) / (m * spread**3)
    return (mean - centre) / spread, skew


def date_bootstrap(sample: CarSample) -> Tested:
    """Studentised bootstrap that resamples event dates with all their deals.

    Cameron, Gelbach and Miller 2008, REStat 90 (pairs cluster bootstrap-t): t* of each draw is
    about the sample's mean, with a cluster-robust error by date.
    """
    name = "Bootstrap t by date"
    if sample.n < 2 or sample.dates is None:
        return NotApplicable(name, "needs at least two deals with dates")
    codes = np.unique(sample.dates, return_inverse=True)[1]
    groups = int(codes.max()) + 1
    if groups < 6:
        return NotApplicable(name, f"needs at least six dates; the deals share {groups}")
    total = np.asarray(np.bincount(codes, sample.car, groups), dtype=np.float64)
    size = np.bincount(codes, minlength=groups).astype(np.float64)
    statistic = float(_cluster_t(total[None, :], size[None, :], 0.0)[0])
    stream = np.random.default_rng(sample.seed)
    drawn = stream.integers(0, groups, (DRAWS, groups))
    null = _cluster_t(total[drawn], size[drawn], float(sample.car.mean()))
    null = null[np.isfinite(null)]
    p = (1 + (np.abs(null) >= abs(statistic) - 1e-12).sum()) / (len(null) + 1)
    return TestResult(
        name,
        NULL,
        statistic,
        "bootstrap",
        float(p),
        caution="deals of different dates are taken as independent",
        citation="Cameron, Gelbach and Miller 2008",
        facts={"draws": float(len(null)), "dates": float(groups)},
    )


def _cluster_t(total: Floats, size: Floats, centre: float) -> Floats:
    """(B,) t of the mean about ``centre`` from (B, G) cluster sums and sizes, CR1 error."""
    groups = size.shape[1]
    n = size.sum(axis=1)
    mean = total.sum(axis=1) / n
    score = total - size * mean[:, None]
    error = np.sqrt(groups / (groups - 1) * (score**2).sum(axis=1)) / n
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray((mean - centre) / error)


def sample_quantile(sample: CarSample) -> Tested:
    """A handful of deals among their own past (Gelbach, Helland and Klick 2013, ALER 15).

    p = (1 + number of estimation returns at least as large in size) / (M + 1), where the returns
    are those of the deals' mean on each estimation day; for a window of L days, rolling L-day
    sums. For one deal it is the published test; the mean of up to five is our extension.
    """
    name = "Sample-quantile test"
    if not 1 <= sample.n <= HANDFUL or sample.series is None:
        return NotApplicable(name, f"is for up to {HANDFUL} deals; this sample has {sample.n}")
    daily = sample.series.estimation.mean(axis=0)[None, :]
    sums = rolling_sums(daily, sample.series.event.shape[1])[0]
    sums = sums[np.isfinite(sums)]
    if sums.size == 0:
        return NotApplicable(name, "the estimation windows share no run of days that long")
    car = float(sample.car.mean())
    spread = float(sums.std(ddof=1)) if sums.size > 1 else 0.0
    if not spread > 0:
        return NotApplicable(name, "needs estimation returns that differ")
    p = (1 + int((np.abs(sums) >= abs(car)).sum())) / (sums.size + 1)
    return TestResult(
        name,
        "the return is drawn from the same distribution as those before",
        car / spread,
        "empirical",
        float(min(p, 1.0)),
        caution="rolling sums of several days overlap",
        citation="Gelbach, Helland and Klick 2013",
        facts={"compared_with": float(sums.size)},
    )
