"""Confidence sets by inverting the Anderson-Rubin test: valid however weak the instruments.

The test of α = a regresses y - aD on the instruments and tests their coefficients. Those are
π_y - aπ_D, and their covariance is a quadratic in a, so the set's ends are roots of a polynomial
and are found as such: no grid can miss or cut them off.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace

import numpy as np
from scipy import linalg, optimize, special

from pipeline.core.estimate import ConfidenceSet, NotApplicable, Shape, Tested, f_test
from pipeline.core.prices import Floats

CITATION = "Anderson and Rubin (1949)"
HOTELLING = "Pustejovsky and Tipton (2018)"
SILENT = "the clusters are too few for so many instruments"
METHOD = "inversion of the Anderson-Rubin test"
NAN = float("nan")


@dataclass(frozen=True, slots=True, eq=False)
class ReducedForms:
    """Coefficients of outcome and endogenous variables on L instruments, joint covariance.

    Attributes:
        outcome: (L,) π_y.
        treatment: (L,) π_D.
        covariance: (mL, mL) of outcome, treatment and others, stacked in that order.
        df: denominator degrees of freedom of the F test.
        repaired: whether negative eigenvalues of a two-way covariance were set to zero.
        others: (L, m - 2) coefficients of further endogenous variables.
        hotelling: η where the statistic is Hotelling's T² with that many degrees of freedom, so
            that (η - L + 1)/(Lη) of it is F(L, η - L + 1); zero where a statistic over L is
            F(L, df).
    """

    outcome: Floats
    treatment: Floats
    covariance: Floats
    df: float
    repaired: bool = False
    others: Floats = field(default_factory=lambda: np.empty((0, 0)))
    hotelling: float = 0.0

    @property
    def columns(self) -> Floats:
        """(L, m) outcome, treatment and the others."""
        both = np.column_stack([self.outcome, self.treatment])
        return np.column_stack([both, self.others]) if self.others.size else both

    @property
    def scaling(self) -> tuple[float, float]:
        """What one unit of F is in the statistic, and the denominator degrees of freedom."""
        L, eta = len(self.outcome), self.hotelling
        if not eta:
            return float(L), self.df
        return L * eta / (eta - L + 1), eta - L + 1

    @property
    def silent(self) -> bool:
        """Whether the clusters are too few to reject anything with so many instruments."""
        return self.hotelling > 0 and self.hotelling - len(self.outcome) < 0

    def bound(self, level: float) -> float:
        """The largest statistic that is not rejected at 1 - ``level``; infinite if silent."""
        if self.silent:
            return float("inf")
        unit, df = self.scaling
        return unit * float(special.fdtri(len(self.outcome), df, level))


def statistic(forms: ReducedForms, of_outcome: float, of_treatment: float) -> float:
    """Wald statistic of ``of_outcome``·π_y - ``of_treatment``·π_D = 0, a point of the line a.

    The ratio of the two weights is a; (0, 1) is infinity. The other endogenous variables, if
    any, have coefficients of zero.
    """
    weights = np.zeros(forms.columns.shape[1])
    weights[0], weights[1] = of_outcome, -of_treatment
    return along(forms, weights)


def along(forms: ReducedForms, weights: Floats) -> float:
    """The statistic of Σ weights_j π_j = 0, ``weights`` (m,) in the order of the columns."""
    L, m = len(forms.outcome), len(weights)
    blocks = forms.covariance.reshape(m, L, m, L)
    spread = np.einsum("i,ikjl,j->kl", weights, blocks, weights)
    pi = forms.columns @ weights
    return float(pi @ np.linalg.solve(spread, pi))


def anderson_rubin_test(forms: ReducedForms, value: float = 0.0) -> Tested:
    """H0: the treatment's coefficient is ``value``, those of other endogenous variables zero.

    F(L, df) whatever the first stage; with clusters Hotelling's T² against F(L, η - L + 1). Not
    applicable where that has less than one degree of freedom.
    """
    if forms.silent:
        return NotApplicable("Anderson-Rubin", SILENT)
    unit, df = forms.scaling
    several = forms.columns.shape[1] > 2
    return f_test(
        "Anderson-Rubin",
        "the coefficients of all endogenous variables are zero"
        if several
        else f"the coefficient of the treatment is {value:g}",
        statistic(forms, 1.0, value) / unit,
        len(forms.outcome),
        df,
        caution="rejects also when the instruments act on the outcome by another way",
        citation=f"{CITATION}; {HOTELLING}" if forms.hotelling else CITATION,
    )


def anderson_rubin_set(forms: ReducedForms, level: float) -> ConfidenceSet:
    """All values the test does not reject at 1 - ``level``, in the treatment coefficient's unit.

    One instrument: the exact quadratic, hence an interval, two rays or the line. Several: the
    ends are eigenvalues of a quadratic pencil, polished on the scale θ = arctan(a); the set may
    be empty. If it falls into more pieces than a :class:`ConfidenceSet` can hold, the smallest
    interval or pair of rays around it is given, which covers at least as often, and the method
    says so. For further endogenous variables see
    :func:`~pipeline.estimators.projection.projected_set`.
    """
    if forms.silent:
        return silent_set(level)
    bound = forms.bound(level)
    if len(forms.outcome) > 1:
        return _several(forms, bound, level)
    (y,), (d,), V = forms.outcome, forms.treatment, forms.covariance
    return quadratic_set(
        float(d * d - bound * V[1, 1]),
        float(-2 * (y * d - bound * (V[0, 1] + V[1, 0]) / 2)),
        float(y * y - bound * V[0, 0]),
        level,
    )


def silent_set(level: float) -> ConfidenceSet:
    """The whole line, because the clusters cannot reject any value."""
    return _set(Shape.LINE, NAN, NAN, level, f"{METHOD}; {SILENT}")


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


def _set(
    shape: Shape, low: float, high: float, level: float, method: str = METHOD
) -> ConfidenceSet:
    return ConfidenceSet(shape, float(low), float(high), level, method)


def _several(forms: ReducedForms, bound: float, level: float) -> ConfidenceSet:
    unit, scale = in_own_units(forms)

    def excess(theta: float) -> float:
        return statistic(unit, np.cos(theta), np.sin(theta)) - bound

    return from_angles(_middles(unit, bound), excess, scale, level)


def accepts_nothing(forms: ReducedForms, bound: float) -> bool:
    """Whether the statistic exceeds ``bound`` at every value; several instruments."""
    unit, _ = in_own_units(forms)
    middles = _middles(unit, bound)
    return all(statistic(unit, np.cos(t), np.sin(t)) > bound for t in middles)


def _middles(forms: ReducedForms, bound: float) -> Floats:
    """One angle in each arc between the places where the statistic may cross the bound.

    Angles repeat after π; each arc lies inside the set or outside it.
    """
    breaks = np.arctan(_pencil_roots(forms, bound))
    return np.asarray((breaks + np.append(breaks[1:], breaks[0] + np.pi)) / 2)


def from_angles(
    middles: Floats,
    excess: Callable[[float], float],
    scale: float,
    level: float,
    method: str = METHOD,
) -> ConfidenceSet:
    """The set {scale·tan θ: excess(θ) ≤ 0}; between two ``middles`` it has one end at most."""
    inside = np.array([excess(middle) <= 0 for middle in middles])
    if inside.all() or not inside.any():
        return _set(Shape.LINE if inside.all() else Shape.EMPTY, NAN, NAN, level, method)
    starts, ends = _pieces(middles, inside, excess)
    pieces = len(starts)
    if pieces > 1:
        method += f"; the smallest such set around its {pieces} pieces"
    if excess(np.pi / 2) > 0:
        low, high = scale * np.tan(starts).min(), scale * np.tan(ends).max()
        return _set(Shape.INTERVAL, low, high, level, method)
    # Infinity is in the set: the widest gap between pieces is what the rays leave out.
    following = np.append(starts[1:], starts[0] + np.pi)
    gap = int(np.argmax(following - ends))
    low, high = scale * np.tan(ends[gap]), scale * np.tan(following[gap])
    return _set(Shape.RAYS, low, high, level, method)


def in_own_units(forms: ReducedForms) -> tuple[ReducedForms, float]:
    """The forms with each variable in units of its coefficients' spread, and a's unit."""
    L = len(forms.outcome)
    size = np.linalg.norm(np.sqrt(np.diag(forms.covariance)).reshape(-1, L), axis=1)
    weight = np.repeat(1 / size, L)
    columns = forms.columns / size
    unit = replace(
        forms,
        outcome=columns[:, 0],
        treatment=columns[:, 1],
        others=columns[:, 2:],
        covariance=forms.covariance * np.outer(weight, weight),
    )
    return unit, float(size[0] / size[1])


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
