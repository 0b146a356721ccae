"""First stages and the reduced form, and whether the instruments tell the variables apart.

One endogenous variable: its first-stage F says how strong the instruments are. Several: a large F
each may come from one and the same movement, so each F here stands beside one that holds the
other variables' predictions fixed.
"""

from __future__ import annotations

import numpy as np
from scipy import linalg

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import Estimate, NotApplicable, Tested, chi2_test
from pipeline.core.prices import Floats
from pipeline.estimators.algebra import orthonormal, solve
from pipeline.estimators.diagnostics import wald
from pipeline.estimators.errors import (
    cautions,
    degrees_of_freedom,
    factor,
    positive,
    sandwich,
    words,
)
from pipeline.estimators.sample import Sample
from pipeline.estimators.stages import Parts, moments_product

SANDERSON_WINDMEIJER = "Sanderson and Windmeijer (2016)"
KLEIBERGEN_PAAP = "Kleibergen and Paap (2006)"
SINGULAR = 1e-12


def stage(
    design: Design, options: FitOptions, parts: Parts, *, of_treatment: bool, which: int = 0
) -> Estimate:
    """A first stage (endogenous ``which``) or the reduced form (outcome), on Z and controls.

    Same rows, covariance and degrees-of-freedom rule as the second stage. ``fit``: r_squared
    (within the effects if there are any, else about the mean), partial_r_squared of the
    instruments, small_sample_factor.
    """
    sample = parts.sample
    target = sample.X[:, parts.places[which]] if of_treatment else sample.y
    partial = parts.E[:, which] if of_treatment else parts.y
    outcome = parts.endogenous[which] if of_treatment else design.outcome
    names = (*parts.instruments, *parts.control_names)
    b, e, bread = solve(parts.spread, target)
    squares, k = float(e @ e), parts.k_first + sample.counted
    errors = sandwich(sample.rule, parts.spread, bread, e[:, None], k)
    df, sentence = degrees_of_freedom(sample.rule, parts.k_first + sample.absorbed)
    several = len(parts.endogenous) > 1
    first = f"First stage of {outcome.replace('_', ' ')}" if several else "First stage"
    return Estimate(
        estimator="first_stage" if of_treatment else "reduced_form",
        title=first if of_treatment else "Reduced form",
        estimand=f"difference in mean {outcome} associated with one more unit of each instrument, "
        "holding the controls fixed",
        names=names,
        coefficients=b,
        covariance=positive(errors.covariance, names),
        df=df,
        df_rule=sentence,
        covariance_name=words(sample.rule),
        n=sample.n,
        treatment=parts.instruments[0],
        outcome=outcome,
        clusters=sample.rule.counts,
        effects=sample.levels,
        fit={
            "r_squared": 1 - squares / float(np.sum((target - target.mean()) ** 2)),
            "partial_r_squared": 1 - squares / float(partial @ partial),
            **multiplier(sample, k),
        },
        scores=errors.influence,
        citation="Angrist and Pischke (2009), ch. 4",
        notes=(*sample.notes, *cautions(sample.rule, errors.floored)),
        level=options.level,
    )


def multiplier(sample: Sample, k: int) -> dict[str, float]:
    """small_sample_factor, where one number makes the covariance from the scores."""
    value = factor(sample.rule, k)
    return {} if np.isnan(value) else {"small_sample_factor": value}


def individual_f(parts: Parts, which: int) -> Tested:
    """Robust F of the instruments in the first stage of endogenous ``which``."""
    direction = np.eye(len(parts.endogenous))[which]
    null = f"the instruments do not move {parts.endogenous[which]}"
    return _f(parts, direction, np.eye(len(parts.instruments)), "First-stage F", null, "")


def conditional_f(parts: Parts, which: int) -> Tested:
    """F of the instruments for endogenous ``which``, the others' predictions held fixed.

    ũ = E_j - E₋ⱼδ̂, δ̂ by two-stage least squares, is regressed on the L instruments; its
    coefficients have L - p + 1 directions that Ê₋ⱼ leaves free, whose Wald statistic over their
    number is F, with the fit's covariance. With classical errors it is Sanderson and Windmeijer
    (2016, eq. 14 and 17); with one endogenous variable the robust first-stage F.
    """
    p = len(parts.endogenous)
    basis = orthonormal(parts.Z)
    moments = basis.T @ parts.E
    others = np.delete(moments, which, axis=1)
    direction = np.zeros(p)
    direction[which] = 1.0
    if p > 1:
        delta = np.linalg.lstsq(others, moments[:, which])[0]
        direction[[at for at in range(p) if at != which]] = -delta
    name = parts.endogenous[which]
    null = f"the instruments do not move {name} once they move the other variables"
    free = _complement(others)
    return _f(parts, direction, free, "Conditional first-stage F", null, SANDERSON_WINDMEIJER)


def rank_f(parts: Parts) -> Tested:
    """Kleibergen and Paap's rk Wald statistic of rank p - 1, over its L - p + 1 directions, as F.

    The null is that some combination of the endogenous variables is not moved. The combination
    tested is that of the smallest canonical correlation with the instruments (2006, th. 1).
    With one endogenous variable it is the robust first-stage F.
    """
    direction, free = _least_moved(parts)
    null = "some combination of the endogenous variables is not moved by the instruments"
    return _f(parts, direction, free, "Rank test F", null, KLEIBERGEN_PAAP)


def underidentification(parts: Parts) -> Tested:
    """Kleibergen and Paap's rk LM statistic, χ²(L - p + 1): as :func:`rank_f`, null imposed.

    The covariance of the moments is that of the combination itself, not of its first-stage
    residual; with classical errors it is n times the squared smallest canonical correlation
    (Anderson 1951).
    """
    name = "Underidentification, rank LM"
    direction, free = _least_moved(parts)
    basis, combination = orthonormal(parts.Z), parts.E @ direction
    if parts.sample.rule.kind == "classical":
        S = np.eye(basis.shape[1]) * float(combination @ combination) / parts.sample.n
    else:
        S = moments_product(parts.sample.rule, basis * combination[:, None])
    S = free.T @ S @ free
    scale = np.sqrt(np.abs(np.diag(S)))
    if not scale.all() or np.linalg.eigvalsh(S / np.outer(scale, scale))[0] < SINGULAR:
        return NotApplicable(name, "too few clusters for the covariance of the moments")
    g = free.T @ (basis.T @ combination)
    return chi2_test(
        name,
        "some combination of the endogenous variables is not moved by the instruments",
        float(g @ np.linalg.solve(S, g)),
        free.shape[1],
        caution="a small p does not make the instruments strong",
        citation=KLEIBERGEN_PAAP,
    )


def shea_r_squared(parts: Parts) -> Floats:
    """(p,) [(E'E)⁻¹]_jj over [(E'P_Z E)⁻¹]_jj, controls taken out of all.

    The share of each endogenous variable's own variation that the instruments predict apart from
    the others (Shea 1997, in the form of Godfrey 1999).
    """
    size = np.linalg.norm(parts.E, axis=0)
    E = parts.E / size
    moments = orthonormal(parts.Z).T @ E
    own = np.diag(np.linalg.inv(E.T @ E))
    return np.asarray(own / np.diag(np.linalg.inv(moments.T @ moments)))


def _f(
    parts: Parts, direction: Floats, free: Floats, name: str, null: str, citation: str
) -> Tested:
    """Wald F of ``free``' Q'E·direction, Q orthonormal instruments; covariance as in the fit."""
    sample, basis = parts.sample, orthonormal(parts.Z)
    target = parts.E @ direction
    estimates = basis.T @ target
    left = target - basis @ estimates
    L, k = basis.shape[1], parts.k_first + sample.counted
    errors = sandwich(sample.rule, basis, np.eye(L), left[:, None], k, unit_free=False)
    df, _ = degrees_of_freedom(sample.rule, parts.k_first + sample.absorbed)
    V = free.T @ errors.covariance @ free
    return wald(name, null, free.T @ estimates, V, df, citation)


def _least_moved(parts: Parts) -> tuple[Floats, Floats]:
    """The combination (p,) of smallest canonical correlation, and (L, m) what it leaves free."""
    size = np.linalg.norm(parts.E, axis=0)
    E = parts.E / size
    moments = orthonormal(parts.Z).T @ E
    _, vectors = linalg.eigh(moments.T @ moments, E.T @ E)
    return vectors[:, 0] / size, _complement(moments @ vectors[:, 1:])


def _complement(columns: Floats) -> Floats:
    """(L, L - q) orthonormal columns at right angles to ``columns`` (L, q) of full rank."""
    L, q = columns.shape
    if q == 0:
        return np.eye(L)
    return np.asarray(linalg.qr(columns)[0][:, q:], dtype=np.float64)
