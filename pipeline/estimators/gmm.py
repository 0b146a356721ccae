"""Two-step efficient generalised method of moments, with Hansen's J."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import Estimate, EstimationFailed
from pipeline.core.prices import Floats, Integers
from pipeline.estimators import absorb
from pipeline.estimators.algebra import solve
from pipeline.estimators.covariance import cluster_sums, intersection, recoded
from pipeline.estimators.errors import (
    CLUSTER,
    ErrorRule,
    Sandwich,
    degrees_of_freedom,
    of_influence,
    positive,
)
from pipeline.estimators.instrument_tests import Second, overidentification
from pipeline.estimators.instruments import EXACT, with_weak_instrument_checks
from pipeline.estimators.k_class import second_stage
from pipeline.estimators.stages import Parts, moments_product, parts_of

CITATION = "Hansen (1982)"
SINGULAR = 1e-12


def two_step_gmm(design: Design, options: FitOptions) -> Estimate:
    """Instruments weighed by the inverse covariance of their moments at two-stage least squares.

    X (n, k), Z (n, L), effects, sets, tests and stages as in
    :func:`~pipeline.estimators.instruments.two_stage_least_squares`. The weights and the errors
    allow for what the errors allow for: unequal variances, or one or two cluster dimensions, no
    centring. With classical errors, or as many instruments as endogenous variables, it is
    two-stage least squares. The
    overidentification test is J at this estimate with the weights it used (Hansen 1982).

    The covariance is the sandwich at the final residuals, with the usual small-sample factor.
    The controls' moments weigh in too: the fit may leave them a little off zero where that helps
    the instruments agree. df: G - 1 with clusters, n - k without.

    Raises:
        InputProblem: see :func:`~pipeline.estimators.stages.parts_of`.
        EstimationFailed: if the covariance of the moments is not positive, as with too few
            clusters, or as :func:`~pipeline.estimators.k_class.second_stage`.
    """
    parts = parts_of(design, options)
    first = second_stage(parts, 1.0)
    exactly = len(parts.instruments) == len(parts.endogenous)
    plain = parts.sample.rule.kind == "classical" or exactly

    def fit(some: Parts) -> Second:
        begun = second_stage(some, 1.0)
        return begun if plain else _efficient(some, begun.residuals)

    column = with_weak_instrument_checks(design, options, parts, fit, None)
    return replace(
        column,
        estimator="two_step_gmm",
        title="Two-step efficient GMM",
        citation=CITATION,
        tests={**column.tests, "overidentification": overidentification(parts, first)},
        notes=(*column.notes, *_notes(parts, plain)),
    )


def _notes(parts: Parts, plain: bool) -> tuple[str, ...]:
    if plain:
        return ("Here the efficient weights are those of two-stage least squares.",)
    L = len(parts.instruments)
    fewest = min(parts.sample.rule.counts.values(), default=parts.sample.n)
    if fewest < 5 * L:
        return (
            f"{fewest} clusters tell the weights of {L} instruments: efficient weights are noisy "
            "here, and the errors shown take them as known (common practice, no source).",
        )
    return ()


def _efficient(parts: Parts, residuals: Floats) -> Second:
    """The estimate with the weights of ``residuals`` (n,), and its influence rows.

    With z̃ free of the controls C, the endogenous variables' coefficients need the instruments'
    moments alone; the controls' moments then take the value S_cz S_zz⁻¹ times those of the
    instruments.
    """
    sample = parts.sample
    C, E = parts.controls, sample.X[:, list(parts.places)]
    moments = np.column_stack([C, parts.Z]) * residuals[:, None]
    S = moments_product(sample.rule, moments)
    q = C.shape[1]
    W = _inverse(S[q:, q:])
    d = parts.Z.T @ parts.E
    met = d.T @ (W @ (parts.Z.T @ parts.y))
    alpha = np.asarray(np.linalg.solve(d.T @ W @ d, met), dtype=np.float64)
    g = parts.Z.T @ (parts.y - parts.E @ alpha)
    carried = S[:q, q:] @ W
    bread = solve(C, sample.y)[2] if q else np.empty((0, 0))
    gamma = np.asarray(bread @ (C.T @ (sample.y - E @ alpha) - carried @ g), dtype=np.float64)
    b = _in_place(parts, alpha[None], gamma[None])[0]
    u = sample.y - sample.X @ b
    if float(u @ u) <= EXACT * sample.total:
        raise EstimationFailed("the regressors fit the outcome exactly: no error is left")
    u = u + _left_in_effects(parts, residuals, parts.Z @ (W @ g))
    influence = _influence(parts, u, d, W, carried, bread)
    k = len(b)
    errors = of_influence(sample.rule, influence, k + sample.counted)
    df, sentence = degrees_of_freedom(sample.rule, k + sample.absorbed)
    covariance = positive(errors.covariance, sample.names)
    return Second(b, u, Sandwich(covariance, influence, errors.floored), covariance, df, sentence)


def _in_place(parts: Parts, endogenous: Floats, controls: Floats) -> Floats:
    """(m, k) columns in the order of X from those of the endogenous (m, p) and the controls."""
    made = np.empty((len(endogenous), len(parts.sample.names)))
    rest = [at for at in range(made.shape[1]) if at not in parts.places]
    made[:, list(parts.places)], made[:, rest] = endogenous, controls
    return made


def _left_in_effects(parts: Parts, residuals: Floats, pull: Floats) -> Floats:
    """(n,) what the fit leaves in the effects, whose moments bend as those of the controls do.

    Effects' moments are E'h with h the residuals times the sums of residuals times ``pull`` (n,)
    over the row's cluster; what stays is the projection of h on the effects.
    """
    sample = parts.sample
    if not sample.levels:
        return np.zeros(sample.n)
    h = residuals * _totals(sample.rule, residuals * pull)
    effects = {name: parts.design.effects[name][sample.kept] for name in sample.levels}
    return np.asarray(h - absorb.demean(h[:, None], effects)[:, 0])


def _totals(rule: ErrorRule, rows: Floats) -> Floats:
    """(n,) each row's cluster total of ``rows``; the row itself without clusters."""
    if rule.kind != CLUSTER:
        return rows
    codes = list(rule.clusters.values())
    total = sum((_total(rows, c) for c in codes), np.zeros(len(rows)))
    return total - _total(rows, intersection(*codes)) if len(codes) > 1 else total


def _total(rows: Floats, codes: Integers) -> Floats:
    return np.asarray(cluster_sums(rows[:, None], codes)[recoded(codes), 0])


def _influence(
    parts: Parts, u: Floats, d: Floats, W: Floats, carried: Floats, bread: Floats
) -> Floats:
    """(n, k) what each row adds to the coefficients, each in its regressor's place.

    The rows use z̃'u where the controls' fit has been taken out of z, so Z̃'u is Z̃'(y - Eα).
    """
    scores = parts.Z * u[:, None]
    endogenous = scores @ (W @ d @ np.linalg.inv(d.T @ W @ d))
    C, E = parts.controls, parts.sample.X[:, list(parts.places)]
    own = C * u[:, None] - endogenous @ (E.T @ C)
    own -= (scores - endogenous @ d.T) @ carried.T
    return _in_place(parts, endogenous, own @ bread)


def _inverse(S: Floats) -> Floats:
    scale = np.sqrt(np.abs(np.diag(S)))
    scale = np.where(scale > 0, scale, 1.0)
    unit = S / np.outer(scale, scale)
    if np.linalg.eigvalsh(unit)[0] < SINGULAR:
        raise EstimationFailed(
            "the covariance of the instruments' moments is not positive: too few clusters for "
            "efficient weights"
        )
    return np.asarray(np.linalg.inv(unit) / np.outer(scale, scale))
