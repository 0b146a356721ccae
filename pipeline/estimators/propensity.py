"""The probability of the treatment given the controls, and the rows it is fitted on."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import special

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import EstimationFailed
from pipeline.core.prices import Booleans, Floats
from pipeline.estimators.algebra import refuse_dependent, scaled
from pipeline.estimators.errors import ErrorRule, choose_errors
from pipeline.estimators.probit import refuse_separation, refuse_single_separation
from pipeline.estimators.sample import plain
from pipeline.estimators.treatment import binary_treatment

MOST_STEPS = 60
CONVERGED = 1e-20
SUSPICIOUS_INDEX = 12.0
SUPPORTED = ("hc0", "hc1")


@dataclass(frozen=True, slots=True, eq=False)
class Observed:
    """Rows of an estimator that takes the treatment to be as good as random given the controls.

    Attributes:
        y: (n,) outcome.
        D: (n,) who is treated.
        X: (n, p) controls, a constant among them.
        names: their names.
        rule: the treatment of the errors.
        notes: what a reader must know of the sample.
    """

    y: Floats
    D: Booleans
    X: Floats
    names: tuple[str, ...]
    rule: ErrorRule
    notes: tuple[str, ...]


@dataclass(frozen=True, slots=True, eq=False)
class Logit:
    """A logit's maximum: (p,) coefficients, (n,) probabilities, (n, p) influence of each row."""

    coefficients: Floats
    p: Floats
    influence: Floats


def observed(
    design: Design,
    options: FitOptions,
    *,
    otherwise: str = "hc1",
    supported: tuple[str, ...] = SUPPORTED,
) -> Observed:
    """The design without its instruments, effects and candidates.

    Raises:
        InputProblem: ``no_variation``, ``few_rows``, ``collinear``, ``treatment_not_binary``, or
            a problem of clusters or covariance; ``separation`` if the controls tell the treated
            from the untreated without error, so that there is nobody to compare them with.
    """
    rule = choose_errors(
        design.clusters,
        design.n,
        options,
        otherwise=otherwise,
        cluster_by_default=True,
        supported=supported,
    )
    notes = plain(design, rule).notes
    refuse_dependent(design.X, design.names)
    D = binary_treatment(design)
    at = design.names.index(design.treatment)
    X = np.delete(design.X, at, axis=1)
    names = tuple(name for name in design.names if name != design.treatment)
    refuse_separated(D, X, names)
    return Observed(
        y=design.y,
        D=D,
        X=X,
        names=names,
        rule=rule,
        notes=notes,
    )


def refuse_separated(D: Booleans, X: Floats, names: tuple[str, ...]) -> None:
    """Raise if a combination of the controls X (n, p) tells the treated D (n,) from the others.

    Raises:
        InputProblem: ``separation`` naming the variables (Albert and Anderson 1984).
    """
    _maximum(D, scaled(X)[0], X, names)


def fit_logit(D: Booleans, X: Floats, names: tuple[str, ...]) -> Logit:
    """Maximum likelihood of P(D) = 1/(1 + e^(-x'γ)) by Newton's method, columns scaled inside.

    Iterated until the Newton decrement is below 1e-20 a row: looser stops move the fourth digit
    of an inverse-probability estimate (Greene 2018, sec. 17.3).

    Raises:
        InputProblem: ``separation`` naming the variables.
        EstimationFailed: if Newton's method does not converge.
    """
    unit, length = scaled(X)
    target = D.astype(np.float64)
    gamma, converged = _maximum(D, unit, X, names)
    if not converged:
        raise EstimationFailed("the probability of the treatment did not converge")
    index = unit @ gamma
    p = special.expit(index)
    inner = np.linalg.inv((unit * (p * special.expit(-index))[:, None]).T @ unit)
    influence = (unit * (target - p)[:, None]) @ inner / length
    return Logit(gamma / length, np.asarray(p), np.asarray(influence))


def _maximum(D: Booleans, unit: Floats, X: Floats, names: tuple[str, ...]) -> tuple[Floats, bool]:
    """Coefficients of the columns ``unit``, X at unit length, and whether they are a maximum."""
    refuse_single_separation(D, X, names)
    signs = np.where(D, 1.0, -1.0)
    gamma, converged = _newton(signs, D.astype(np.float64), unit)
    if not converged or float((signs * (unit @ gamma)).max()) > SUSPICIOUS_INDEX:
        refuse_separation(signs, unit, names)
    return gamma, converged


def _newton(signs: Floats, target: Floats, X: Floats) -> tuple[Floats, bool]:
    gamma = np.zeros(X.shape[1])
    value = float(special.log_expit(signs * (X @ gamma)).sum())
    for _ in range(MOST_STEPS):
        index = X @ gamma
        weight = special.expit(index) * special.expit(-index)
        gradient = X.T @ (target - special.expit(index))
        try:
            move = np.linalg.solve((X * weight[:, None]).T @ X, gradient)
        except np.linalg.LinAlgError:
            return gamma, False
        decrement = float(gradient @ move)
        if not np.isfinite(decrement):
            return gamma, False
        size = 1.0
        while size > 1e-8:
            new = float(special.log_expit(signs * (X @ (gamma + size * move))).sum())
            if new >= value - 1e-12 * abs(value):
                break
            size /= 2
        gamma, value = gamma + size * move, new
        if decrement <= CONVERGED * len(signs):
            return gamma, True
    return gamma, False
