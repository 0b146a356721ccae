"""The average cumulative path around the announcement, by group, with its band."""

from __future__ import annotations

import numpy as np
import pandas as pd

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.estimate import t_reach
from pipeline.core.prices import Floats
from pipeline.core.window import Window

DRAWS = 1999


def average_paths(
    abnormal: AbnormalReturns, groups: pd.Series, days: Window, level: float, seed: int = 20260301
) -> pd.DataFrame:
    """Cumulative average abnormal return of each group.

    Args:
        abnormal: the headline model's abnormal returns of N deals.
        groups: (N,) group name of each deal, in the order of ``abnormal``.
        days: the days drawn; the path starts at zero before its first day.
        level: of the pointwise band, t(n - 1) on the cross-sectional standard error of the
            cumulated return.

    Returns:
        ``group, day, n, mean, low, high`` and ``low_path, high_path``, decimal: the band of each
        day alone, and the one that holds the whole path; a deal whose prices stop leaves the
        average from that day on.
    """
    inside = abnormal.counted(days)
    cumulative = np.cumsum(inside, axis=1)  # a gap stays a gap: NaN from there on
    names = groups.to_numpy()
    parts = [
        _path(str(group), cumulative[names == group], days, level, seed)
        for group in dict.fromkeys(names)
    ]
    return pd.concat(parts, ignore_index=True)


def _path(group: str, own: Floats, days: Window, level: float, seed: int) -> pd.DataFrame:
    n = np.isfinite(own).sum(axis=0)
    mean = np.array([column[np.isfinite(column)].mean() if k else np.nan
                     for column, k in zip(own.T, n, strict=True)])  # fmt: skip
    spread = np.array([column[np.isfinite(column)].std(ddof=1) if k > 1 else np.nan
                       for column, k in zip(own.T, n, strict=True)])  # fmt: skip
    with np.errstate(invalid="ignore", divide="ignore"):
        error = spread / np.sqrt(n)
    reach = np.array([t_reach(level, k - 1) if k > 1 else np.nan for k in n])
    every = simultaneous_reach(own, mean, error, level, seed)
    frame = pd.DataFrame(
        {
            "group": group,
            "day": np.arange(days.start, days.end + 1),
            "n": n,
            "mean": mean,
            "low": mean - reach * error,
            "high": mean + reach * error,
            "low_path": mean - every * error,
            "high_path": mean + every * error,
        }
    )
    return frame[frame["n"] > 0]


def simultaneous_reach(own: Floats, mean: Floats, error: Floats, level: float, seed: int) -> float:
    """How many standard errors hold the whole path at ``level``: max-|t| multiplier bootstrap.

    t*(day) = sum of g_i (x_i - mean) / (n error) with g standard normal, one g a deal for all its
    days (Chernozhukov, Chetverikov and Kato 2013, Annals of Statistics 41). Given the deals, t* is
    normal with the covariance of the deals' own terms, and drawn as such. Deals with a gap are
    left out of the draws; NaN with fewer than two whole paths.
    """
    whole = own[np.isfinite(own).all(axis=1)]
    usable = np.isfinite(error) & (error > 0)
    if len(whole) < 2 or not usable.any():
        return float("nan")
    scaled = (whole - mean)[:, usable] / (len(whole) * error[usable])
    # The symmetric root of scaled'scaled, from scaled itself: its small values keep their digits.
    _, size, axes = np.linalg.svd(np.linalg.qr(scaled, mode="r"))
    root = (axes[: len(size)].T * size) @ axes[: len(size)]
    draws = np.random.default_rng(seed).standard_normal((DRAWS, len(root))) @ root
    return float(np.quantile(np.abs(draws).max(axis=1), level))
