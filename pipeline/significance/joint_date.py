"""Many companies, one date: the deals as a system of regressions with their residual covariance."""

from __future__ import annotations

import numpy as np
from scipy import special

from pipeline.core.estimate import NotApplicable, Tested, t_test
from pipeline.core.prices import Floats
from pipeline.significance.sample import CarSample

NAME = "Joint regressions of one date"
SOURCE = "Schipper and Thompson 1983; Binder 1985"


def joint_date(sample: CarSample) -> Tested:
    """t of the equal-weighted sum of event dummies in a system of regressions, t(M - d).

    R_i = X b_i + D g_i + e_i for every deal i of one date, D a dummy for each session of the
    window. Deals share their regressors, so generalised least squares is least squares deal by
    deal and the dummies are the abnormal returns; Σ = E'E / (M - d) from the estimation windows
    carries the dependence. With c = L + 1'X* (X'X)⁻¹ X*'1, the same for all,

        t = mean CAR / sqrt(c 1'Σ1 / n²),

    exact under normal residuals (Schipper and Thompson 1983, J. Accounting Research 21; Binder
    1985, J. Accounting Research 23). The facts hold the exact F that every CAR is zero,
    (M - d - n + 1) / (n (M - d)) CAR' Σ⁻¹ CAR / c with n and M - d - n + 1 degrees of freedom
    (Rao 1973, sec. 8b). Σ is singular when deals outnumber M - d: then there is no answer.
    """
    reason = _unlike(sample)
    if reason or sample.series is None:
        return NotApplicable(NAME, reason or "needs the daily series of the estimation windows")
    residuals = sample.series.estimation
    residuals = residuals[:, np.isfinite(residuals[0])]
    n, free = sample.n, int(sample.df[0])
    if n > free:
        return NotApplicable(
            NAME,
            f"{n} deals are more than the {free} degrees of freedom of an estimation window, so "
            "that the residual covariance is singular",
        )
    covariance = residuals @ residuals.T / free
    scale = float(np.mean((sample.std_dev / sample.series.residual_sd) ** 2))
    error = float(np.sqrt(scale * covariance.sum())) / n
    if not error > 0:
        return NotApplicable(NAME, "needs residuals that differ from zero")
    return t_test(
        NAME,
        "the mean cumulative abnormal return is zero",
        float(sample.car.mean()) / error,
        free,
        caution="rejects too often when variance rises at the event",
        citation=SOURCE,
        facts={"std_error": error, **_each(sample.car, covariance * scale, free)},
    )


def _unlike(sample: CarSample) -> str:
    """Why the deals are no system with common regressors; '' if they are."""
    if sample.n < 2:
        return "needs at least two deals"
    series = sample.series
    if series is None or series.sessions is None or sample.dates is None:
        return "needs the daily series of the estimation windows and their dates"
    if (sample.dates != sample.dates[0]).any():
        return f"is for deals of one date; these lie on {len(np.unique(sample.dates))}"
    used = np.isfinite(series.estimation)
    days = series.sessions.dates()
    if (used != used[0]).any() or (days != days[0])[:, used[0]].any():
        return "needs estimation windows of the same sessions; some lack a return others have"
    if not np.isfinite(series.event).all():
        return "needs a return of every deal on each day of the window"
    return ""


def _each(car: Floats, covariance: Floats, free: int) -> dict[str, float]:
    """The exact F that each of n CARs is zero."""
    n = len(car)
    left = free - n + 1
    statistic = float(car @ np.linalg.pinv(covariance, hermitian=True) @ car) * left / (n * free)
    return {"each_zero_f": statistic, "each_zero_p": float(special.fdtrc(n, left, statistic))}
