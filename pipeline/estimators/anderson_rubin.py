"""Confidence sets by inverting the Anderson-Rubin test: valid however weak the instruments.

The test of α = a regresses y - aD on the instruments and tests their coefficients. Those are
π_y - aπ_D, and their covariance is a quadratic in a, so the set's ends are roots of a polynomial
and are found as such: no grid can miss or cut them off.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy import linalg, optimize, special

from pipeline.core.estimate import ConfidenceSet, Shape, TestResult, f_test
from pipeline.core.prices import Floats

CITATION = "Anderson and Rubin (1949)"
METHOD = "inversion of the Anderson-Rubin test"
NAN = float("nan")


@dataclass(frozen=True, slots=True, eq=False)
class ReducedForms:
    """Coefficients of outcome and treatment on the L instruments, and their joint covariance.

    Attributes:
        outcome: (L,) π_y.
        treatment: (L,) π_D.
        covariance: (2L, 2L) of the two, stacked in that order; any kind of errors.
        df: denominator degrees of freedom of the F test.
        repaired: whether negative eigenvalues of a two-way covariance were set to zero.
    """

    outcome: Floats
    treatment: Floats
    covariance: Floats
    df: float
    repaired: bool = False


def statistic(forms: ReducedForms, of_outcome: float, of_treatment: float) -> float:
    """Wald statistic of ``of_outcome``·π_y - ``of_treatment``·π_D = 0, a point of the line a.

    The ratio of the two weights is a; (0, 1) is infinity. Divided by L it is F(L, df) at the
    true a.
    """
    L = len(forms.outcome)
    V = forms.covariance
    pi = of_outcome * forms.outcome - of_treatment * forms.treatment
    cross = V[:L, L:] + V[L:, :L]
    spread = of_outcome**2 * V[:L, :L] - of_outcome * of_treatment * cross
    spread = spread + of_treatment**2 * V[L:, L:]
    return float(pi @ np.linalg.solve(spread, pi))


def anderson_rubin_test(forms: ReducedForms, value: float = 0.0) -> TestResult:
    """H0: the coefficient of the treatment is ``value``; F(L, df) whatever the first stage."""
    L = len(forms.outcome)
    return f_test(
        "Anderson-Rubin",
        f"the coefficient of the treatment is {value:g}",
        statistic(forms, 1.0, value) / L,
        L,
        forms.df,
        caution="rejects also when the instruments act on the outcome by another way",
        citation=CITATION,
    )


def anderson_rubin_set(forms: ReducedForms, level: float) -> ConfidenceSet:
    """All values the test does not reject at 1 - ``level``, in the treatment coefficient's unit.

    One instrument: the exact quadratic, hence an interval, two rays or the line. Several: the
    ends are eigenvalues of a quadratic pencil, polished on the scale θ = arctan(a); the set may
    be empty. If it falls into more pieces than a :class:`ConfidenceSet` can hold, the smallest
    interval or pair of rays around it is given, which covers at least as often, and the method
    says so.
    """
    L = len(forms.outcome)
    bound = L * float(special.fdtri(L, forms.df, level))
    if L > 1:
        return _several(forms, bound, level)
    (y,), (d,), V = forms.outcome, forms.treatment, forms.covariance
    return quadratic_set(
        float(d * d - bound * V[1, 1]),
        float(-2 * (y * d - bound * (V[0, 1] + V[1, 0]) / 2)),
        float(y * y - bound * V[0, 0]),
        level,
    )


def quadratic_set(A: float, B: float, C: float, level: float) -> ConfidenceSet:
    """{a: Aa² + Ba + C ≤ 0}: an interval, two rays, the line or nothing.

    A half line, when A is exactly zero, is an interval with an infinite end.
    """
    if A == 0:
        if B == 0:
            return _set(Shape.LINE if C <= 0 else Shape.EMPTY, NAN, NAN, level)
        end = -C / B
        low, high = (-np.inf, end) if B > 0 else (end, np.inf)
        return _set(Shape.INTERVAL, low, high, level)
    discriminant = B * B - 4 * A * C
    if discriminant <= 0 and A < 0:
        return _set(Shape.LINE, NAN, NAN, level)
    if discriminant < 0:
        return _set(Shape.EMPTY, NAN, NAN, level)
    # The larger root first: the other follows from the product without cancellation.
    larger = -(B + np.copysign(np.sqrt(discriminant), B)) / 2
    roots = sorted((larger / A, C / larger if larger != 0 else 0.0))
    return _set(Shape.INTERVAL if A > 0 else Shape.RAYS, roots[0], roots[1], level)


def _set(shape: Shape, low: float, high: float, level: float, more: str = "") -> ConfidenceSet:
    return ConfidenceSet(shape, float(low), float(high), level, METHOD + more)


def _several(forms: ReducedForms, bound: float, level: float) -> ConfidenceSet:
    unit, scale = _in_own_units(forms)

    def excess(theta: float) -> float:
        return statistic(unit, np.cos(theta), np.sin(theta)) - bound

    breaks = np.arctan(_pencil_roots(unit, bound))
    # Angles repeat after π; the arcs between breaks each lie inside the set or outside it.
    middles = (breaks + np.append(breaks[1:], breaks[0] + np.pi)) / 2
    inside = np.array([excess(middle) <= 0 for middle in middles])
    if inside.all() or not inside.any():
        return _set(Shape.LINE if inside.all() else Shape.EMPTY, NAN, NAN, level)
    starts, ends = _pieces(middles, inside, excess)
    pieces = len(starts)
    more = f"; the smallest such set around its {pieces} pieces" if pieces > 1 else ""
    if excess(np.pi / 2) > 0:
        low, high = scale * np.tan(starts).min(), scale * np.tan(ends).max()
        return _set(Shape.INTERVAL, low, high, level, more)
    # Infinity is in the set: the widest gap between pieces is what the rays leave out.
    following = np.append(starts[1:], starts[0] + np.pi)
    gap = int(np.argmax(following - ends))
    return _set(Shape.RAYS, scale * np.tan(ends[gap]), scale * np.tan(following[gap]), level, more)


def _in_own_units(forms: ReducedForms) -> tuple[ReducedForms, float]:
    """The forms with both variables in units of their coefficients' spread, and a's unit."""
    L = len(forms.outcome)
    size = np.sqrt(np.diag(forms.covariance))
    y, d = float(np.linalg.norm(size[:L])), float(np.linalg.norm(size[L:]))
    weight = np.repeat([1 / y, 1 / d], L)
    unit = ReducedForms(
        forms.outcome / y,
        forms.treatment / d,
        forms.covariance * np.outer(weight, weight),
        forms.df,
    )
    return unit, y / d


def _pencil_roots(forms: ReducedForms, bound: float) -> Floats:
    """Real parts of the roots a of det(bound·V(a) - π(a)π(a)') = 0, at most 2L, sorted.

    The determinant changes sign only where the statistic crosses the bound. Real parts of complex
    roots are kept: a break too many costs one evaluation, a break too few a wrong set.
    """
    L = len(forms.outcome)
    V, y, d = forms.covariance, forms.outcome, forms.treatment
    constant = bound * V[:L, :L] - np.outer(y, y)
    linear = -bound * (V[:L, L:] + V[L:, :L]) + np.outer(y, d) + np.outer(d, y)
    square = bound * V[L:, L:] - np.outer(d, d)
    nothing, one = np.zeros((L, L)), np.eye(L)
    roots = linalg.eigvals(
        np.block([[nothing, one], [-constant, -linear]]),
        np.block([[one, nothing], [nothing, square]]),
    )
    real = np.real(roots)[np.isfinite(roots)]
    return np.sort(np.append(real, 0.0))


def _pieces(
    middles: Floats, inside: np.ndarray, excess: Callable[[float], float]
) -> tuple[Floats, Floats]:
    """Starts and ends (angles) of the runs of arcs that lie inside, ends after starts."""
    starts: list[float] = []
    ends: list[float] = []
    following = np.append(middles[1:], middles[0] + np.pi)
    for at, (here, there) in enumerate(zip(middles, following, strict=True)):
        enters = not inside[at] and inside[(at + 1) % len(inside)]
        leaves = inside[at] and not inside[(at + 1) % len(inside)]
        if enters or leaves:
            end = float(optimize.brentq(excess, here, there, xtol=1e-15, rtol=1e-14))
            (starts if enters else ends).append(end)
    if ends[0] < starts[0]:
        ends = [*ends[1:], ends[0] + np.pi]
    return np.array(starts), np.array(ends)
