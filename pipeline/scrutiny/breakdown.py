"""How far the instruments may act by another way before a statement about the effect gives way.

A violation up to a share s lets each instrument reach the outcome directly by at most s times
what it does to the outcome in all, its reduced-form coefficient, in either direction. A statement,
that the effect is not zero or that it is not what least squares says, holds until the smallest
share whose violations let the set reach the value denied (Conley, Hansen and Rossi 2012, sec. 2).
"""

from __future__ import annotations

from collections.abc import Callable
from itertools import product

import numpy as np
from scipy import linalg, optimize

from pipeline.core.estimate import t_reach
from pipeline.core.prices import Floats
from pipeline.estimators.algebra import solve
from pipeline.estimators.errors import degrees_of_freedom, of_influence
from pipeline.estimators.stages import Parts
from pipeline.scrutiny.exclusion import (
    Allowed,
    ViolatedForms,
    reduced_form,
    union_of_intervals,
    violated_forms,
)
from pipeline.scrutiny.ground import row_sums

LARGEST_SHARE = 1e3
MOST_INSTRUMENTS = 12


def breakdown_share(parts: Parts, level: float, value: float = 0.0) -> float:
    """Smallest share at which the union of two-stage intervals holds ``value``.

    Zero if the interval holds it already, infinite if no share up to a thousand does. Shares are
    of the size of the reduced form; the union is
    :func:`~pipeline.scrutiny.exclusion.union_of_intervals`.

    Raises:
        InputProblem: ``violation_range`` with more instruments than corners can be gone through.
    """
    pi = np.abs(reduced_form(parts))

    def margin(share: float) -> float:
        found = union_of_intervals(parts, -share * pi, share * pi, level)
        return max(found.low - value, value - found.high)

    return _first(margin)


def breakdown_share_anderson_rubin(
    parts: Parts, level: float, value: float = 0.0, made: ViolatedForms | None = None
) -> float:
    """The same for Anderson-Rubin sets, however weak the instruments; exact for any number.

    At one violation the set holds ``value`` if its statistic is at most the critical value. The
    statistic is a quadratic in the violation, so its least value over those allowed is a bounded
    least-squares problem. Further endogenous variables have coefficients of zero.
    """
    violated = made or violated_forms(parts)
    forms, L = violated.forms, len(parts.instruments)
    critical = forms.bound(level)
    V = forms.covariance[: 2 * L, : 2 * L]
    cross = V[:L, L:] + V[L:, :L]
    spread = V[:L, :L] - value * cross + value**2 * V[L:, L:]
    root = linalg.cholesky(linalg.inv(spread))
    gap = root @ (forms.outcome - value * forms.treatment)
    pi = np.abs(reduced_form(parts))
    moved = root @ violated.moved * pi

    def margin(share: float) -> float:
        if share == 0:
            return float(gap @ gap) - critical
        found = optimize.lsq_linear(moved, gap, (-share, share), tol=1e-14)
        return 2 * float(found.cost) - critical

    return _first(margin)


def _first(margin: Callable[[float], float]) -> float:
    """Where a margin that falls with the share first reaches zero."""
    if margin(0.0) <= 0:
        return 0.0
    high = 1.0
    while margin(high) > 0:
        high *= 2
        if high > LARGEST_SHARE:
            return float("inf")
    return float(optimize.brentq(margin, 0.0, high, xtol=1e-10))


def least_squares_of(parts: Parts) -> float:
    """The least-squares effect with the same controls, effects and rows as the two stages."""
    return float(parts.D @ parts.y) / float(parts.D @ parts.D)


def difference_at(parts: Parts, gamma: Floats, level: float) -> Allowed:
    """Two stages on y - Zγ, γ (L,), less least squares, with the error of both.

    The covariance is that of the difference of their influences, under the fit's own rule, HC1 in
    the place of equal variances (Hausman 1978, without his assumption that one is efficient).
    """
    sample = parts.sample
    predicted = parts.D - solve(parts.Z, parts.D)[1]
    y = parts.y - parts.Z @ gamma
    bread = 1.0 / float(predicted @ predicted)
    two = float(predicted @ y) * bread
    one = least_squares_of(parts)
    left_two, left_one = y - two * parts.D, parts.y - one * parts.D
    influence = predicted * left_two * bread - parts.D * left_one / float(parts.D @ parts.D)
    k = len(sample.names)
    errors = of_influence(row_sums(sample.rule), influence[:, None], k + sample.counted)
    error = float(np.sqrt(errors.covariance[0, 0]))
    half = t_reach(level, degrees_of_freedom(sample.rule, k + sample.absorbed)[0]) * error
    return Allowed(two - one, error, two - one - half, two - one + half)


def share_that_reconciles(parts: Parts, level: float) -> float:
    """Smallest share at which two stages and least squares no longer differ beyond their errors.

    As :func:`breakdown_share` for the difference of the two, whose errors are made together.
    Infinite with more than twelve instruments, whose corners are too many.
    """
    pi = np.abs(reduced_form(parts))
    if len(pi) > MOST_INSTRUMENTS:
        return float("inf")
    corners = np.array(list(product((-1.0, 1.0), repeat=len(pi)))) * pi

    def margin(share: float) -> float:
        found = [difference_at(parts, share * corner, level) for corner in corners]
        return max(min(item.low for item in found), -max(item.high for item in found))

    return _first(margin)
