"""What the residuals and regressors of a linear fit say about it."""

from __future__ import annotations

import numpy as np
from scipy import linalg

from pipeline.core.estimate import NotApplicable, Tested, TestResult, chi2_test, f_test
from pipeline.core.prices import Floats, Integers
from pipeline.estimators.algebra import dependent, leverage, scaled, solve
from pipeline.estimators.covariance import cluster_sums
from pipeline.estimators.errors import ErrorRule, sandwich

CONDITION_LIMIT = 30.0


def condition_number(X: Floats) -> float:
    """Largest over smallest singular value of X (n, k), columns scaled to unit length.

    Belsley, Kuh and Welsch (1980): above 30 the coefficients are hard to tell apart.
    """
    values = linalg.svdvals(scaled(X)[0])
    return float(values[0] / values[-1]) if values[-1] > 0 else float("inf")


def variance_inflation(X: Floats, column: int) -> float:
    """1/(1 - R²) of one column of X (n, k) on the others, R² about the mean.

    Belsley, Kuh and Welsch (1980). 1 when there is no other column.
    """
    target = X[:, column]
    others = np.delete(X, column, axis=1)
    about = float(np.sum((target - target.mean()) ** 2))
    if others.shape[1] == 0 or about == 0:
        return 1.0
    left = float(np.sum(solve(others, target)[1] ** 2))
    return about / left if left > 0 else float("inf")


def wald(
    name: str, null: str, estimates: Floats, covariance: Floats, df: float, citation: str = ""
) -> Tested:
    """H0: ``estimates`` (q,) are all zero; b'V⁻¹b/q against F(q, df), χ²(q) if df is infinite.

    Not applicable when V (q, q) is singular, as with more hypotheses than clusters.
    """
    q = len(estimates)
    if q == 0:
        return NotApplicable(name, "there is nothing to test")
    scale = np.sqrt(np.diag(covariance))
    correlation = covariance / np.outer(scale, scale)
    if not np.linalg.cond(correlation) < 1e12:
        return NotApplicable(name, "the covariance of these coefficients is singular")
    z = estimates / scale
    statistic = float(z @ np.linalg.solve(correlation, z))
    if np.isinf(df):
        return chi2_test(name, null, statistic, q, citation=citation)
    return f_test(name, null, statistic / q, q, df, citation=citation)


def breusch_pagan(X: Floats, residuals: Floats) -> TestResult:
    """n·R² of e² on X (n, k with constant), χ²(k - 1) (Breusch and Pagan 1979; Koenker 1981)."""
    squares = residuals**2
    left = solve(X, squares)[1]
    r2 = 1 - float(left @ left) / float(np.sum((squares - squares.mean()) ** 2))
    return chi2_test(
        "Breusch-Pagan",
        "the variance does not depend on the regressors",
        len(squares) * r2,
        X.shape[1] - 1,
        citation="Breusch and Pagan (1979); Koenker (1981)",
    )


def jarque_bera(residuals: Floats) -> TestResult:
    """n/6·(S² + (K - 3)²/4) against χ²(2) (Jarque and Bera 1987)."""
    e = residuals - residuals.mean()
    variance = float(np.mean(e**2))
    skew = float(np.mean(e**3)) / variance**1.5
    kurtosis = float(np.mean(e**4)) / variance**2
    statistic = len(e) / 6 * (skew**2 + (kurtosis - 3) ** 2 / 4)
    return chi2_test(
        "Jarque-Bera",
        "the residuals are normal",
        statistic,
        2,
        caution="informational: the robust errors do not need normal residuals",
        citation="Jarque and Bera (1987)",
    )


def reset(X: Floats, y: Floats, rule: ErrorRule, df: float) -> Tested:
    """Squares and cubes of the fitted values added to the regression, tested jointly.

    Ramsey (1969). Same covariance as the fit; F(2, df - 2), or F(2, df) with clusters.
    """
    fitted = y - solve(X, y)[1]
    spread = float(fitted.std())
    if spread == 0:
        return NotApplicable("RESET", "the fitted values do not vary")
    z = (fitted - fitted.mean()) / spread
    wide = np.column_stack([X, z**2, z**3])
    k = wide.shape[1]
    if len(y) <= k or dependent(wide, tuple(map(str, range(k)))):
        return NotApplicable("RESET", "the fitted values take too few values to bend")
    b, e, bread = solve(wide, y)
    hat = leverage(wide, bread)
    if rule.kind in ("hc2", "hc3") and hat.max() > 1 - 1e-9:
        return NotApplicable("RESET", "one deal is fitted exactly")
    V = sandwich(rule, wide, bread, e[:, None], k, hat).covariance[-2:, -2:]
    below = df if rule.clusters else df - 2
    return wald("RESET", "the relation is linear", b[-2:], V, below, "Ramsey (1969)")


def dfbetas(bread: Floats, influence: Floats, residuals: Floats, hat: Floats, at: int) -> Floats:
    """(n,) change of coefficient ``at`` when a row leaves, in standard errors without the row.

    Belsley, Kuh and Welsch (1980), eq. 2.7; NaN for a row that is fitted exactly.
    """
    n, k = influence.shape
    free = np.where(hat < 1 - 1e-9, 1 - hat, np.nan)
    variance = (float(residuals @ residuals) - residuals**2 / free) / (n - k - 1)
    return np.asarray(influence[:, at] / free / np.sqrt(variance * bread[at, at]))


def intraclass(residuals: Floats, codes: Integers) -> float:
    """Correlation of residuals (n,) within the groups of ``codes``, from the analysis of variance.

    (MSB - MSW)/(MSB + (m₀ - 1)MSW), m₀ the average size adjusted for imbalance (Donner 1986).
    NaN when every group has one row.
    """
    sizes = cluster_sums(np.ones((len(residuals), 1)), codes)[:, 0]
    groups, n = len(sizes), len(residuals)
    if groups < 2 or groups == n:
        return float("nan")
    means = cluster_sums(residuals[:, None], codes)[:, 0] / sizes
    between = float(sizes @ (means - residuals.mean()) ** 2)
    within = float(np.sum((residuals - residuals.mean()) ** 2)) - between
    msb, msw = between / (groups - 1), within / (n - groups)
    typical = (n - float(sizes @ sizes) / n) / (groups - 1)
    return (msb - msw) / (msb + (typical - 1) * msw)
