"""Parametric tests that the mean abnormal return is zero."""

from __future__ import annotations

import numpy as np

from pipeline.core.estimate import NotApplicable, Tested, t_test, z_test
from pipeline.core.prices import Floats
from pipeline.significance.sample import CarSample

NULL = "the mean cumulative abnormal return is zero"
FEW = "needs at least two deals"
ALIKE = "needs deals whose returns differ"


def cross_sectional(sample: CarSample) -> Tested:
    """t = mean / (s / sqrt(n)), t(n - 1) (Brown and Warner 1980, JFE 8).

    ``s`` is the CARs' own cross-sectional standard deviation, so a change of variance on the
    event day does no harm. Deals that move together do.
    """
    name = "Cross-sectional t"
    reason = _no_spread(sample.car)
    if reason:
        return NotApplicable(name, reason)
    statistic = float(sample.car.mean() / (sample.car.std(ddof=1) / np.sqrt(sample.n)))
    return t_test(
        name,
        NULL,
        statistic,
        sample.n - 1,
        caution="assumes that deals are independent of one another",
        citation="Brown and Warner 1980",
    )


def patell(sample: CarSample) -> Tested:
    """Z = sum SCAR / sqrt(sum (M - d) / (M - d - 2)), standard normal (Patell 1976, JAR 14).

    SCARs carry the full forecast-error covariance of the window.
    """
    name = "Patell Z"
    if sample.n == 0:
        return NotApplicable(name, "needs at least one deal")
    if (sample.df <= 2).any():
        return NotApplicable(name, "needs more than two degrees of freedom in each estimation")
    scale = np.sqrt(np.sum(sample.df / (sample.df - 2)))
    return z_test(
        name,
        NULL,
        float(sample.scar.sum() / scale),
        caution="rejects too often when variance rises at the event, or deals move together",
        citation="Patell 1976",
    )


def dependence_adjusted_patell(sample: CarSample) -> Tested:
    """Patell's Z over sqrt(1 + (n - 1) r), standard normal (Kolari and Pynnönen 2010, RFS 23).

    ``r`` is the overlap-weighted mean correlation, floored at zero, so the test becomes Patell's
    when no windows meet.
    """
    name = "Dependence-adjusted Patell Z"
    plain = patell(sample)
    if isinstance(plain, NotApplicable):
        return NotApplicable(name, plain.reason)
    if sample.n < 2:
        return NotApplicable(name, FEW)
    link = sample.dependence
    return z_test(
        name,
        NULL,
        plain.statistic * float(np.sqrt(link.effective_n(sample.n) / sample.n)),
        caution="rejects too often when variance rises at the event",
        citation="Kolari and Pynnönen 2010, weighted by window overlap",
        facts={
            "weighted_correlation": link.weighted,
            "effective_n": link.effective_n(sample.n),
        },
    )


def standardised_cross_sectional(sample: CarSample) -> Tested:
    """t = sqrt(n) mean(SCAR) / s(SCAR), t(n - 1) (Boehmer, Musumeci and Poulsen 1991, JFE 30)."""
    name = "Standardised cross-sectional t"
    reason = _no_spread(sample.scar)
    if reason:
        return NotApplicable(name, reason)
    return t_test(
        name,
        NULL,
        _standardised(sample),
        sample.n - 1,
        caution="assumes that deals are independent of one another",
        citation="Boehmer, Musumeci and Poulsen 1991",
    )


def _no_spread(values: Floats) -> str:
    """Why the deals give no error to measure their mean by; '' if they do."""
    if len(values) < 2:
        return FEW
    return "" if values.std(ddof=1) > 0 else ALIKE


def _standardised(sample: CarSample) -> float:
    return float(np.sqrt(sample.n) * sample.scar.mean() / sample.scar.std(ddof=1))


def dependence_adjusted(sample: CarSample) -> Tested:
    """The standardised t times sqrt((1 - r) / (1 + (n - 1) r)) (Kolari and Pynnönen 2010, RFS 23).

    ``r`` is the mean correlation of estimation-window abnormal returns weighted by how much two
    event windows overlap, so the test becomes the standardised t when no windows meet.
    """
    name = "Dependence-adjusted standardised t"
    reason = _no_spread(sample.scar)
    if reason:
        return NotApplicable(name, reason)
    link = sample.dependence
    return t_test(
        name,
        NULL,
        _standardised(sample) * link.adjustment(sample.n),
        sample.n - 1,
        caution="takes the dependence of the estimation window for that of the event",
        citation="Kolari and Pynnönen 2010, weighted by window overlap",
        facts={
            "mean_correlation": link.mean,
            "weighted_correlation": link.weighted,
            "noise_of_mean_correlation": link.noise,
            "overlapping_pairs": link.overlapping,
            "effective_n": link.effective_n(sample.n),
        },
    )


def single_event(sample: CarSample) -> Tested:
    """t = CAR / S(CAR) with t(M - d), for one deal (MacKinlay 1997, JEL 35, sec. 5).

    Only the deal's own estimation window speaks: one deal has no cross-section.
    """
    name = "Single-deal t"
    if sample.n != 1:
        return NotApplicable(name, f"is for one deal; this sample has {sample.n}")
    return t_test(
        name,
        "the deal's cumulative abnormal return is zero",
        float(sample.scar[0]),
        float(sample.df[0]),
        caution="assumes normal returns; one deal is no average",
        citation="MacKinlay 1997",
    )


def time_series(sample: CarSample) -> Tested:
    """t = mean CAR / (sqrt(L) s), s from the portfolio's own estimation days, t(M - 1).

    s² = sum over estimation days of (AAR_t - mean)² / (M - 1) (Brown and Warner 1980, JFE 8, sec.
    3: crude dependence adjustment).
    """
    name = "Portfolio time-series t"
    if sample.series is None:
        return NotApplicable(name, "needs the daily series of the estimation windows")
    known = np.isfinite(sample.series.estimation)
    count = known.sum(axis=0)
    total = np.where(known, sample.series.estimation, 0.0).sum(axis=0)
    daily = total[count > 0] / count[count > 0]
    if len(daily) < 2:
        return NotApplicable(name, "needs two estimation days")
    spread = float(daily.std(ddof=1)) * np.sqrt(len(sample.window))
    return t_test(
        name,
        NULL,
        float(sample.car.mean()) / float(spread),
        len(daily) - 1,
        caution="rejects too often when variance rises at the event",
        citation="Brown and Warner 1980",
    )
