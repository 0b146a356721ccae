"""What if choosers knew something: the effect for every correlation of choice and outcome errors.

Under joint normality the outcome's error has mean ρσλ given the choice, λ the probit's
generalised residual. A value of ρ then fixes the effect: no instrument is needed, none is used
(in the manner of Altonji, Elder and Taber 2005, with the correlation held at a value).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import optimize

from pipeline.core.design import Design
from pipeline.core.estimate import t_reach
from pipeline.core.prices import Floats
from pipeline.estimators.algebra import refusal, solve
from pipeline.estimators.errors import sandwich
from pipeline.estimators.probit import Equation, ProbitFit, fit_probit, mills
from pipeline.scrutiny.ground import Ground

CITATION = "Heckman (1979); Altonji, Elder and Taber (2005)"
LIMIT = 0.99


@dataclass(frozen=True, slots=True, eq=False)
class Choice:
    """(n,) generalised residual λ of the choice, and δ, what it takes off the variance."""

    residual: Floats
    reduction: Floats


def treatment_choice(design: Design) -> Choice:
    """λ of a probit of the 0/1 treatment on the controls: φ/Φ for treated, -φ/(1 - Φ) else.

    Raises:
        InputProblem: ``treatment_not_binary``, or as
            :func:`~pipeline.estimators.probit.fit_probit`.
    """
    at = design.names.index(design.treatment)
    D = design.X[:, at]
    if set(np.unique(D).tolist()) != {0.0, 1.0}:
        raise refusal(
            "treatment_not_binary",
            design.treatment,
            "values other than 0 and 1",
            "a feature a deal has or has not",
            "ask for another check of hidden choice",
        )
    names = tuple(name for name in design.names if name != design.treatment)
    W = np.delete(design.X, at, axis=1)
    return _choice(fit_probit(Equation(D == 1, W, names, design.treatment, names[0])), D == 1)


def announcement_choice(design: Design) -> Choice:
    """λ = φ/Φ of the deals among all candidates, from the design's selection equation.

    Raises:
        InputProblem: ``no_selection``, or as :func:`~pipeline.estimators.probit.fit_probit`.
    """
    rows = design.selection
    if rows is None:
        raise refusal(
            "no_selection",
            "selection",
            "no candidates",
            "who could have announced",
            "declare the selection equation",
        )
    first = fit_probit(Equation(rows.selected, rows.W, rows.names, "announced", rows.names[0]))
    chosen = np.flatnonzero(rows.selected)
    whole = _choice(first, rows.selected)
    residual, reduction = np.empty(design.n), np.empty(design.n)
    residual[rows.outcome_row[chosen]] = whole.residual[chosen]
    reduction[rows.outcome_row[chosen]] = whole.reduction[chosen]
    return Choice(residual, reduction)


def _choice(fit: ProbitFit, chosen: np.ndarray) -> Choice:
    sign = np.where(chosen, 1.0, -1.0)
    residual = sign * mills(sign * fit.index)
    return Choice(residual, residual * (residual + fit.index))


def effect_at(ground: Ground, choice: Choice, rho: float, level: float) -> tuple[float, ...]:
    """Effect and interval if the errors of choice and outcome correlate by ``rho``.

    ρσ solves c = ρ√(e(c)'e(c)/n + c²·mean δ), e(c) the residuals of y - cλ, a quadratic in c;
    at the two-step estimate's own c this is its own σ. The interval takes c as given. ``choice``
    holds one row a row of the ground, which has no fixed effects.

    Raises:
        ValueError: unless -1 < rho < 1.
    """
    if not -1 < rho < 1:
        raise ValueError(f"rho must lie between -1 and 1. Got {rho} instead.")
    X, n = ground.sample.X, ground.n
    b, e, bread = solve(X, np.column_stack([ground.y, choice.residual]))
    yy, yl, ll = (float(e[:, i] @ e[:, j]) / n for i, j in ((0, 0), (0, 1), (1, 1)))
    square = rho**2
    A, B = 1 - square * (ll + float(choice.reduction.mean())), square * yl
    root = float(np.sqrt(B * B + A * square * yy))
    c = (-B + np.sign(rho) * root) / A
    value = float(b[ground.at, 0] - c * b[ground.at, 1])
    left = (e[:, 0] - c * e[:, 1])[:, None]
    V = sandwich(ground.sample.rule, X, bread, left, X.shape[1]).covariance
    half = t_reach(level, ground.robust_df) * float(np.sqrt(V[ground.at, ground.at]))
    return value, value - half, value + half


def breakdown_rho(ground: Ground, choice: Choice, level: float) -> float:
    """The ρ nearest to zero at which the interval holds zero, with its sign.

    Zero if it holds zero at ρ = 0; NaN if it does not up to .99 on either side.
    """
    found = []

    def margin(rho: float) -> float:
        value, low, high = effect_at(ground, choice, rho, level)
        return -1.0 if low <= 0 <= high else min(abs(low), abs(high)) * np.sign(value * start)

    start = effect_at(ground, choice, 0.0, level)[0]
    if margin(0.0) <= 0:
        return 0.0
    for side in (-1.0, 1.0):
        grid = side * np.linspace(0, LIMIT, 100)
        at = next((i for i, rho in enumerate(grid) if margin(float(rho)) <= 0), None)
        if at is not None:
            found.append(_edge(ground, choice, level, float(grid[at - 1]), float(grid[at])))
    return min(found, key=abs, default=float("nan"))


def _edge(ground: Ground, choice: Choice, level: float, inside: float, beyond: float) -> float:
    sign = np.sign(effect_at(ground, choice, inside, level)[0])

    def nearest(rho: float) -> float:
        _, low, high = effect_at(ground, choice, rho, level)
        return float(low if sign > 0 else -high)

    return float(optimize.brentq(nearest, inside, beyond, xtol=1e-10))
