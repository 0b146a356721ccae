"""Strength of instruments: the effective F and the bias it bounds; size-corrected t ratios."""

from __future__ import annotations

import numpy as np
from scipy import optimize, special

from pipeline.core.estimate import ConfidenceSet, Shape, TestResult
from pipeline.core.prices import Floats
from pipeline.estimators.algebra import symmetric_root

MONTIEL_PFLUEGER = "Montiel Olea and Pflueger (2013)"
LEE_AND_OTHERS = "Lee, McCrary, Moreira and Porter (2022)"
BIAS_SHARES = (5, 10, 20, 30)
STRONG = 104.67
"""First-stage F from which the usual 5% t test is valid (Lee and others 2022, abstract: 104.7)."""

ROOT_F_GRID = np.array([2.0, 2.1, 2.2, 2.3, 2.4, 2.5, 2.6, 2.7, 2.8, 2.9, 3.0])
CRITICAL_GRID = np.array([18.66, 9.74, 7.37, 6.18, 5.43, 4.92, 4.54, 4.25, 4.01, 3.82, 3.65])
"""Lee and others (2022), table 3: critical value of |t| at 5% by the root of the first-stage F."""

Z_ONE_SIDED = 1.6449


def noncentral_chi2_tail(x: float, df: float, noncentrality: float) -> float:
    """P(X > x) of a noncentral chi-squared, ``df`` real: Poisson mixture of central tails.

    Johnson, Kotz and Balakrishnan (1995), eq. 29.3. Terms beyond twelve standard deviations of
    the Poisson weight are below 1e-30 and left out.
    """
    half = noncentrality / 2
    reach = 12 * np.sqrt(half) + 40
    j = np.arange(max(0, int(half - reach)), int(half + reach) + 1, dtype=np.float64)
    weight = np.exp(special.xlogy(j, half) - half - special.gammaln(j + 1))
    return float(np.sum(weight * special.gammaincc(df / 2 + j, x / 2)))


def effective_df(W: Floats, x: float) -> float:
    """K_eff = tr(W)²(1 + 2x)/(tr(W'W) + 2x tr(W) maxeig(W)); W (L, L), x = 1/τ.

    Montiel Olea and Pflueger (2013), simplified procedure (the bias bound at its largest).
    """
    trace = float(np.trace(W))
    largest = float(np.linalg.eigvalsh(W)[-1])
    return trace**2 * (1 + 2 * x) / (float(np.sum(W * W)) + 2 * x * trace * largest)


def critical_value(W: Floats, share: float, size: float = 0.05) -> float:
    """Effective F above which the bias is below ``share`` of its worst case, at test size ``size``.

    Upper quantile of χ²(K_eff, x·K_eff)/K_eff, x = 1/share. W (L, L) may have any scale.
    """
    x = 1 / share
    df = effective_df(W, x)
    middle = df * (1 + x)

    def excess(value: float) -> float:
        return noncentral_chi2_tail(value, df, x * df) - size

    high = middle + 10 * np.sqrt(2 * df * (1 + 2 * x)) + 50
    return float(optimize.brentq(excess, middle / 10, high, xtol=1e-10, rtol=1e-13)) / df


def effective_f(D: Floats, Z: Floats, pi: Floats, V: Floats) -> TestResult:
    """F_eff = D'P_Z D / tr(V Z'Z), instruments and treatment with the controls taken out.

    D (n,) treatment, Z (n, L) instruments, ``pi`` (L,) first-stage coefficients, V (L, L) their
    covariance, robust or clustered. With one instrument it is the robust F. ``p_value`` and
    ``df`` (K_eff, noncentrality) are those of the null that the bias exceeds 10% of its worst
    case; ``facts`` hold the critical values critical_5, critical_10, critical_20 and critical_30
    and the K_eff behind the second (Montiel Olea and Pflueger 2013).
    """
    cross = Z.T @ Z
    statistic = float(D @ (Z @ pi)) / float(np.trace(V @ cross))
    root = symmetric_root(cross)
    W = root @ V @ root
    x = 1 / 0.10
    df = effective_df(W, x)
    facts = {f"critical_{share}": critical_value(W, share / 100) for share in BIAS_SHARES}
    return TestResult(
        name="Effective F of the instruments",
        null="weak instruments: bias above 10% of the worst case",
        statistic=statistic,
        distribution="noncentral chi2",
        p_value=noncentral_chi2_tail(statistic * df, df, x * df),
        df=(df, x * df),
        caution="says how far the estimate may be trusted; it is no reason to drop a column",
        citation=MONTIEL_PFLUEGER,
        facts={**facts, "effective_df": df},
    )


def size_corrected_critical(F: float) -> float:
    """c(F), the critical value of |t| that keeps a 5% test at 5%, one instrument.

    c = z√F/(√F - z), z = 1.6449, for 9 ≤ F < 104.67 (within .011 of table 3 of Lee and others
    2022), then 1.96. Below 9 table 3 itself, linear in √F between its points, which errs to the
    safe side because c is convex; infinite below 4.
    """
    if F >= STRONG:
        return float(-special.ndtri(0.025))
    root = float(np.sqrt(F))
    if root < ROOT_F_GRID[0]:
        return float("inf")
    if root < ROOT_F_GRID[-1]:
        return float(np.interp(root, ROOT_F_GRID, CRITICAL_GRID))
    return Z_ONE_SIDED * root / (root - Z_ONE_SIDED)


def size_corrected_set(estimate: float, std_error: float, F: float, reach: float) -> ConfidenceSet:
    """estimate ± c(F)·std_error, never narrower than ``reach`` standard errors, at 95%.

    ``reach`` is the t interval's: c(F) is a large-sample value and knows no degrees of freedom.
    The whole line when c(F) is infinite.
    """
    method = f"t ratio corrected for the strength of the instrument, F = {F:.1f} ({LEE_AND_OTHERS})"
    c = max(size_corrected_critical(F), reach)
    if np.isinf(c):
        return ConfidenceSet(Shape.LINE, float("nan"), float("nan"), 0.95, method)
    return ConfidenceSet(
        Shape.INTERVAL, estimate - c * std_error, estimate + c * std_error, 0.95, method
    )
