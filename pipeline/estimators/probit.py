"""Probit by Newton's method, with tails that do not underflow and separation that is refused."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import optimize, special

from pipeline.core.design import FitOptions
from pipeline.core.estimate import Estimate, EstimationFailed, Tested
from pipeline.core.findings import InputProblem
from pipeline.core.prices import Booleans, Floats
from pipeline.estimators.algebra import refusal, refuse_dependent, scaled
from pipeline.estimators.diagnostics import wald
from pipeline.estimators.errors import (
    CLUSTER,
    ErrorRule,
    cautions,
    degrees_of_freedom,
    factor,
    of_influence,
    positive,
    words,
)

LOG_ROOT_TWO_PI = 0.5 * float(np.log(2 * np.pi))
ROOT_TWO_OVER_PI = float(np.sqrt(2 / np.pi))
MOST_STEPS = 60
CONVERGED = 1e-20
SUSPICIOUS_INDEX = 5.0


@dataclass(frozen=True, slots=True, eq=False)
class Equation:
    """Who chose what, explained by what.

    Attributes:
        chosen: (A,) the choice.
        W: (A, q) regressors, a constant among them.
        names: q names.
        outcome: what the choice is, in words.
        key: the name of the coefficient that matters.
    """

    chosen: Booleans
    W: Floats
    names: tuple[str, ...]
    outcome: str
    key: str


@dataclass(frozen=True, slots=True, eq=False)
class ProbitFit:
    """A probit's maximum.

    Attributes:
        coefficients: (q,).
        information: (q, q) inverse of the observed information.
        index: (A,) w'γ.
        influence: (A, q) inverse information times the score of each row.
        log_likelihood: at the maximum.
        log_likelihood_constant: of the model with the constant alone.
        steps: Newton steps taken.
    """

    coefficients: Floats
    information: Floats
    index: Floats
    influence: Floats
    log_likelihood: float
    log_likelihood_constant: float
    steps: int


def mills(index: Floats) -> Floats:
    """φ(a)/Φ(a) at ``index``, as √(2/π)/erfcx(-a/√2): exact far into both tails."""
    return np.asarray(ROOT_TWO_OVER_PI / special.erfcx(index * -np.sqrt(0.5)), dtype=np.float64)


def fit_probit(equation: Equation) -> ProbitFit:
    """Maximum likelihood of P(chosen) = Φ(w'γ).

    The log-likelihood is globally concave, so Newton's steps are halved only while they
    overshoot (Greene 2018, sec. 17.3). Columns are scaled to unit length inside.

    Raises:
        InputProblem: ``one_outcome`` if all rows chose alike, ``few_rows`` or ``collinear``,
            ``separation`` naming the variables whose combination tells the two apart.
        EstimationFailed: if Newton's method does not converge.
    """
    chosen, W, names = equation.chosen, equation.W, equation.names
    if chosen.all() or not chosen.any():
        raise refusal(
            "one_outcome",
            "selection",
            "every candidate chose alike",
            "candidates that announced and candidates that did not",
            "add candidates without a deal",
        )
    refuse_dependent(W, names)
    refuse_single_separation(chosen, W, names)
    unit, length = scaled(W)
    signs = np.where(chosen, 1.0, -1.0)
    gamma, steps, converged = _newton(signs, unit)
    if not converged or float((signs * (unit @ gamma)).max()) > SUSPICIOUS_INDEX:
        refuse_separation(signs, unit, names)
    if not converged:
        raise EstimationFailed("the selection equation did not converge")
    return _at_maximum(signs, W, gamma / length, steps)


def _at_maximum(signs: Floats, W: Floats, gamma: Floats, steps: int) -> ProbitFit:
    index = W @ gamma
    generalised, weight = _derivatives(signs, index)
    unit, length = scaled(W)
    inverse = np.linalg.inv((unit * weight[:, None]).T @ unit) / np.outer(length, length)
    share = float((signs > 0).mean())
    return ProbitFit(
        coefficients=gamma,
        information=inverse,
        index=index,
        influence=(W * generalised[:, None]) @ inverse,
        log_likelihood=float(special.log_ndtr(signs * index).sum()),
        log_likelihood_constant=len(signs)
        * (share * float(np.log(share)) + (1 - share) * float(np.log1p(-share))),
        steps=steps,
    )


def _derivatives(signs: Floats, index: Floats) -> tuple[Floats, Floats]:
    """Generalised residuals (A,) and minus the second derivatives (A,) of each row."""
    generalised = signs * mills(signs * index)
    return generalised, generalised * (generalised + index)


def row_derivatives(chosen: Booleans, index: Floats) -> tuple[Floats, Floats]:
    """(A,) generalised residuals and (A,) minus the second derivatives by the index w'γ."""
    return _derivatives(np.where(chosen, 1.0, -1.0), index)


def _newton(signs: Floats, W: Floats) -> tuple[Floats, int, bool]:
    gamma = np.zeros(W.shape[1])
    value = float(special.log_ndtr(signs * (W @ gamma)).sum())
    for step in range(1, MOST_STEPS + 1):
        generalised, weight = _derivatives(signs, W @ gamma)
        gradient = W.T @ generalised
        try:
            move = np.linalg.solve((W * weight[:, None]).T @ W, gradient)
        except np.linalg.LinAlgError:
            return gamma, step, False
        decrement = float(gradient @ move)
        size = 1.0
        while size > 1e-8:
            trial = gamma + size * move
            new = float(special.log_ndtr(signs * (W @ trial)).sum())
            if new >= value - 1e-12 * abs(value):
                break
            size /= 2
        gamma, value = trial, new
        if not np.isfinite(decrement):
            return gamma, step, False
        if decrement <= CONVERGED * len(signs):
            return gamma, step, True
    return gamma, MOST_STEPS, False


def refuse_single_separation(chosen: Booleans, W: Floats, names: tuple[str, ...]) -> None:
    """Raise if one variable alone splits those who chose from those who did not."""
    yes, no = W[chosen], W[~chosen]
    above = no.max(axis=0) <= yes.min(axis=0)
    below = yes.max(axis=0) <= no.min(axis=0)
    varies = np.ptp(W, axis=0) > 0
    guilty = [at for at in range(len(names)) if varies[at] and (above[at] or below[at])]
    if guilty:
        found = [_level(names[at], yes[:, at], no[:, at]) for at in guilty]
        raise _separated([names[at] for at in guilty], "; ".join(found))


def _level(name: str, yes: Floats, no: Floats) -> str:
    """The values of a variable that decide, and for whom."""
    if no.max() < yes.min() or yes.max() < no.min():
        side, cut = ("from", yes.min()) if no.max() < yes.min() else ("up to", yes.max())
        return f"all with {name} {side} {cut:g} chose it, and nobody else did"
    sides = (
        (yes[(yes > no.max()) | (yes < no.min())], "chose it"),
        (no[(no > yes.max()) | (no < yes.min())], "did not choose it"),
    )
    values, who = next(side for side in sides if len(side[0]))
    level = f"= {values[0]:g}" if np.ptp(values) == 0 else f"{values.min():g} to {values.max():g}"
    return f"all with {name} {level} {who}"


def refuse_separation(signs: Floats, W: Floats, names: tuple[str, ...]) -> None:
    """Raise if a combination b has q_i w_i'b ≥ 0 in all rows and > 0 in one.

    Linear programme of Albert and Anderson (1984): maximise Σ q_i w_i'b in the box |b| ≤ 1.
    """
    signed = W * signs[:, None] * np.sqrt(len(signs))
    found = optimize.linprog(
        -signed.sum(axis=0),
        A_ub=-signed,
        b_ub=np.zeros(len(signs)),
        bounds=(-1, 1),
        method="highs",
    )
    if found.status != 0 or found.x is None:
        return
    # A separating direction may be stretched to the box; without one only zero is feasible.
    size = np.abs(found.x)
    if size.max() > 0.5:
        varies = np.ptp(W, axis=0) > 0
        raise _separated([name for at, name in enumerate(names) if varies[at] and size[at] > 1e-6])


def _separated(guilty: list[str], found: str = "") -> InputProblem:
    listed = ", ".join(guilty)
    return refusal(
        "separation",
        listed,
        found or f"{listed} together tell those who chose from those who did not without error",
        "a variable whose values both share",
        "drop it, group its levels, or leave out the rows it decides",
    )


def area_under_curve(chosen: Booleans, index: Floats) -> float:
    """Share of pairs, one of each kind, that the index orders right, ties counting one half.

    Mann and Whitney (1947); the area under the receiver operating characteristic (Hanley and
    McNeil 1982).
    """
    yes, no = index[chosen], np.sort(index[~chosen])
    below = np.searchsorted(no, yes, side="left") + np.searchsorted(no, yes, side="right")
    return float(below.sum()) / (2 * len(yes) * len(no))


def covariance_of(fit: ProbitFit, rule: ErrorRule) -> tuple[Floats, bool]:
    """(q, q): inverse information if the rule is classical, else its sandwich; and if repaired.

    The sandwich's factors are those of maximum likelihood, n/(n-1) and G/(G-1): k is 1.
    """
    if rule.kind == "classical":
        return fit.information, False
    errors = of_influence(rule, fit.influence, 1)
    return errors.covariance, errors.floored


def limits(rule: ErrorRule) -> tuple[float, str]:
    """Degrees of freedom of a likelihood or two-step estimate: infinite, G - 1 with clusters."""
    if rule.kind == CLUSTER:
        return degrees_of_freedom(rule, 0)
    return float("inf"), "the normal: the estimator's distribution is known in large samples only"


def probit_estimate(
    fit: ProbitFit, equation: Equation, rule: ErrorRule, options: FitOptions
) -> Estimate:
    """The probit as an :class:`Estimate`.

    ``fit``: pseudo_r_squared (McFadden 1974), auc, log_likelihood, steps, probability_smallest,
    _p10, _median, _p90 and _largest of Φ(w'γ), marginal_effect.<name>, the mean of φ(w'γ)γ, and
    small_sample_factor (robust errors).
    ``tests``: all_variables, Wald. ``scores`` (A, q) are the influences.
    """
    V, floored = covariance_of(fit, rule)
    df, sentence = limits(rule)
    names = equation.names
    return Estimate(
        estimator="probit",
        title="Probit",
        estimand=f"change in the normal index of {equation.outcome} associated with one more unit "
        "of a variable, holding the others fixed",
        names=names,
        coefficients=fit.coefficients,
        covariance=positive(V, names),
        df=df,
        df_rule=sentence,
        covariance_name="inverse of the observed information"
        if rule.kind == "classical"
        else words(rule),
        n=len(equation.chosen),
        treatment=equation.key,
        outcome=equation.outcome,
        clusters=rule.counts,
        fit={**_facts(fit, equation), **_multiplier(rule)},
        tests={"all_variables": _all_variables(fit, equation, V, df)},
        scores=fit.influence,
        notes=cautions(rule, floored),
        citation="Greene (2018), sec. 17.3",
        level=options.level,
    )


def _all_variables(fit: ProbitFit, equation: Equation, V: Floats, df: float) -> Tested:
    varies = np.flatnonzero(np.ptp(equation.W, axis=0) > 0)
    return wald(
        "Wald test of the selection equation",
        "no variable matters",
        fit.coefficients[varies],
        V[np.ix_(varies, varies)],
        df,
    )


def _multiplier(rule: ErrorRule) -> dict[str, float]:
    value = factor(rule, 1)
    return {} if np.isnan(value) else {"small_sample_factor": value}


def _facts(fit: ProbitFit, equation: Equation) -> dict[str, float]:
    probability = special.ndtr(fit.index)
    points = np.quantile(probability, [0.0, 0.1, 0.5, 0.9, 1.0])
    density = float(np.mean(np.exp(-0.5 * fit.index**2 - LOG_ROOT_TWO_PI)))
    labels = ("smallest", "p10", "median", "p90", "largest")
    varies = np.ptp(equation.W, axis=0) > 0
    return {
        "pseudo_r_squared": 1 - fit.log_likelihood / fit.log_likelihood_constant,
        "auc": area_under_curve(equation.chosen, fit.index),
        "log_likelihood": fit.log_likelihood,
        "steps": float(fit.steps),
        **{f"probability_{label}": float(p) for label, p in zip(labels, points, strict=True)},
        **{
            f"marginal_effect.{name}": density * float(fit.coefficients[at])
            for at, name in enumerate(equation.names)
            if varies[at]
        },
    }
