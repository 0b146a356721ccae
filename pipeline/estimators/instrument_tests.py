"""Tests beside a fit with instruments, and the estimates other weights would give."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import linalg

from pipeline.core.estimate import (
    NotApplicable,
    Tested,
    TestResult,
    chi2_test,
    f_test,
    t_test,
)
from pipeline.core.prices import Floats
from pipeline.estimators.algebra import solve
from pipeline.estimators.diagnostics import wald
from pipeline.estimators.errors import Sandwich, degrees_of_freedom, sandwich
from pipeline.estimators.stages import Parts, moment_covariance

STOCK_YOGO_SIZE = {
    1: (16.38, 8.96, 6.66, 5.53),
    2: (19.93, 11.59, 8.75, 7.25),
    3: (22.30, 12.83, 9.54, 7.80),
}
"""Instruments -> first-stage F for a largest 5% test size of 10, 15, 20, 25%: Stock and Yogo
(2005), table 5.2."""
WU_HAUSMAN = "Wu (1973); Hausman (1978); Wooldridge (2010), sec. 6.3.1"


@dataclass(frozen=True, slots=True, eq=False)
class Second:
    """Second stage: coefficients (k,), residuals (n,) of the structural equation, covariance."""

    coefficients: Floats
    residuals: Floats
    errors: Sandwich
    covariance: Floats
    df: float
    df_rule: str


def homoskedastic_f(parts: Parts) -> TestResult:
    """Cragg and Donald (1993) F, with the critical values that hold under equal variances."""
    L, sample = len(parts.instruments), parts.sample
    left = solve(parts.Z, parts.D)[1]
    free = sample.n - parts.k_first - sample.absorbed
    noise = float(left @ left)
    statistic = (float(parts.D @ parts.D) - noise) / L / (noise / free)
    sizes = dict(zip((10, 15, 20, 25), STOCK_YOGO_SIZE.get(L, ()), strict=False))
    return f_test(
        "First-stage F, equal variances",
        "the instruments do not move the treatment",
        statistic,
        L,
        free,
        caution="holds under equal variances and independent deals only; kept for comparison",
        citation="Cragg and Donald (1993); Stock and Yogo (2005)",
        facts={f"stock_yogo_size_{size}": value for size, value in sizes.items()},
    )


def cragg_donald(parts: Parts) -> float:
    """Smallest root of |E'P_Z E/L - f E'M_Z E/(n - L - k)| = 0 (Cragg and Donald 1993)."""
    free = parts.sample.n - parts.k_first - parts.sample.absorbed
    rest = solve(parts.Z, parts.E)[1]
    noise = rest.T @ rest
    roots = linalg.eigh(parts.E.T @ parts.E - noise, noise, eigvals_only=True)
    return float(roots[0]) / len(parts.instruments) * free


def wu_hausman(parts: Parts) -> Tested:
    """The first-stage residuals added to least squares, with the fit's own covariance.

    t of the residual of one endogenous variable; F of those of several, jointly.
    """
    sample, p = parts.sample, len(parts.endogenous)
    noise = solve(parts.spread, sample.X[:, parts.places])[1]
    wide = np.column_stack([sample.X, noise])
    b, e, bread = solve(wide, sample.y)
    k = len(b)
    errors = sandwich(sample.rule, wide, bread, e[:, None], k + sample.counted)
    df, _ = degrees_of_freedom(sample.rule, k + sample.absorbed)
    name = "Wu-Hausman"
    if p > 1:
        null = "least squares and two stages estimate the same coefficients"
        return wald(name, null, b[-p:], errors.covariance[-p:, -p:], df, WU_HAUSMAN)
    return t_test(
        name,
        "least squares and two stages estimate the same coefficient",
        float(b[-1] / np.sqrt(errors.covariance[-1, -1])),
        df,
        caution="has little power when the instruments are weak",
        citation=WU_HAUSMAN,
    )


def overidentification(parts: Parts, second: Second) -> Tested:
    """Hansen's J at the two-step efficient estimate; Sargan's nR² with classical errors.

    The weights are those of ``second``'s residuals (Hansen 1982; Sargan 1958). χ²(L - p).
    The controls' moments are met exactly, so the instruments' own suffice, controls taken out.
    """
    L, p, rule = len(parts.instruments), len(parts.endogenous), parts.sample.rule
    name = "Sargan" if rule.kind == "classical" else "Hansen J"
    if p == L:
        words = "treatments" if p == 1 else "endogenous variables"
        return NotApplicable(name, f"as many instruments as {words}: nothing is left to test")
    if rule.kind == "classical":
        u = second.residuals
        S = parts.Z.T @ parts.Z * float(u @ u) / len(u)
        v = u
    else:
        S = moment_covariance(parts, second.residuals)
        scale = np.sqrt(np.abs(np.diag(S)))
        if np.linalg.eigvalsh(S / np.outer(scale, scale))[0] < 1e-12:
            return NotApplicable(name, "too few clusters for the covariance of the moments")
        d, y = parts.Z.T @ parts.E, parts.Z.T @ parts.y
        weighted = np.linalg.solve(S, d)
        v = parts.y - parts.E @ np.linalg.solve(weighted.T @ d, weighted.T @ y)
    g = parts.Z.T @ v
    return chi2_test(
        name,
        "the instruments agree on one coefficient",
        float(g @ np.linalg.solve(S, g)),
        L - p,
        caution="a flaw that all instruments share goes unseen, and treatment effects that differ "
        "between deals can reject too",
        citation="Sargan (1958)" if rule.kind == "classical" else "Hansen (1982)",
    )


def smallest_root(parts: Parts) -> float:
    """κ, the smallest root of |Y'Y - κ Y'M_Z Y| = 0, Y = [y, E]; at least one.

    Anderson and Rubin (1949); Fuller (1977).
    """
    Y = np.column_stack([parts.y, parts.E])
    Y = Y / np.linalg.norm(Y, axis=0)
    rest = solve(parts.Z, Y)[1]
    return float(linalg.eigh(Y.T @ Y, rest.T @ rest, eigvals_only=True)[0])


def other_weights(parts: Parts) -> dict[str, float]:
    """Limited-information maximum likelihood, Fuller's (a = 1), and each instrument alone.

    Of the treatment's coefficient; an instrument alone only where one variable is endogenous.
    Far from two-stage least squares, they point to weak instruments.
    """
    both = np.column_stack([parts.y, parts.E])
    rest = solve(parts.Z, both)[1]
    kappa = smallest_root(parts)
    free = parts.sample.n - parts.k_first - parts.sample.absorbed

    def k_class(weight: float) -> float:
        moments = both.T @ both - weight * (rest.T @ rest)
        return float(np.linalg.solve(moments[1:, 1:], moments[1:, 0])[0])

    return {
        "liml": k_class(kappa),
        "liml_kappa": kappa,
        "fuller": k_class(kappa - 1 / free),
        **{
            f"alone.{name}": float(z @ parts.y) / float(z @ parts.D)
            for name, z in zip(parts.instruments, parts.Z.T, strict=True)
            if len(parts.endogenous) == 1
        },
    }
