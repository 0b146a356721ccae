"""Two-step efficient generalised method of moments for one treatment, with Hansen's J."""

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
from pipeline.estimators.instruments import (
    EXACT,
    Second,
    overidentification,
    with_weak_instrument_checks,
)
from pipeline.estimators.k_class import second_stage
from pipeline.estimators.stages import Parts, moments_product, parts_of

CITATION = "Hansen (1982)"
SINGULAR = 1e-12


def two_step_gmm(design: Design, options: FitOptions) -> Estimate:
    """Instruments weighed by the inverse covariance of their moments at two-stage least squares.

    X (n, k), Z (n, L), effects, sets, tests and stages as in
    :func:`~pipeline.estimators.instruments.two_stage_least_squares`. The weights and the errors
    allow for what the errors allow for: unequal variances, or one or two cluster dimensions, no
    centring. With classical errors, or one instrument, it is two-stage least squares. The
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
    plain = parts.sample.rule.kind == "classical" or len(parts.instruments) == 1
    second = first if plain else _efficient(design, parts, first.residuals)
    column = with_weak_instrument_checks(design, options, parts, second)
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


def _efficient(design: Design, parts: Parts, residuals: Floats) -> Second:
    """The estimate with the weights of ``residuals`` (n,), and its influence rows.

    With z̃ free of the controls C, the treatment's coefficient needs the instruments' moments
    alone; the controls' moments then take the value S_cz S_zz⁻¹ times those of the instruments.
    """
    sample, at = parts.sample, parts.at
    C, D = parts.controls, sample.X[:, at]
    moments = np.column_stack([C, parts.Z]) * residuals[:, None]
    S = moments_product(sample.rule, moments)
    q = C.shape[1]
    W = _inverse(S[q:, q:])
    d = parts.Z.T @ parts.D
    alpha = float(d @ W @ (parts.Z.T @ parts.y)) / float(d @ W @ d)
    g = parts.Z.T @ (parts.y - alpha * parts.D)
    carried = S[:q, q:] @ W
    bread = solve(C, sample.y)[2] if q else np.empty((0, 0))
    gamma = bread @ (C.T @ (sample.y - alpha * D) - carried @ g)
    b = np.insert(gamma, at, alpha)
    u = sample.y - sample.X @ b
    if float(u @ u) <= EXACT * sample.total:
        raise EstimationFailed("the regressors fit the outcome exactly: no error is left")
    u = u + _left_in_effects(design, parts, residuals, parts.Z @ (W @ g))
    influence = _influence(parts, u, d, W, carried, bread)
    k = len(b)
    errors = of_influence(sample.rule, influence, k + sample.counted)
    df, sentence = degrees_of_freedom(sample.rule, k + sample.absorbed)
    covariance = positive(errors.covariance, sample.names)
    return Second(b, u, Sandwich(covariance, influence, errors.floored), covariance, df, sentence)


def _left_in_effects(design: Design, parts: Parts, residuals: Floats, pull: Floats) -> Floats:
    """(n,) what the fit leaves in the effects, whose moments bend as those of the controls do.

    Effects' moments are E'h with h the residuals times the sums of residuals times ``pull`` (n,)
    over the row's cluster; what stays is the projection of h on the effects.
    """
    sample = parts.sample
    if not sample.levels:
        return np.zeros(sample.n)
    h = residuals * _totals(sample.rule, residuals * pull)
    effects = {name: design.effects[name][sample.kept] for name in sample.levels}
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
    """(n, k) what each row adds to the coefficients, the treatment's in its place.

    The rows use z̃'u where the controls' fit has been taken out of z, so Z̃'u is Z̃'(y - αD).
    """
    scores = parts.Z * u[:, None]
    treatment = scores @ (W @ d) / float(d @ W @ d)
    C, D = parts.controls, parts.sample.X[:, parts.at]
    own = C * u[:, None] - np.outer(treatment, C.T @ D)
    own -= (scores - np.outer(treatment, d)) @ carried.T
    return np.insert(own @ bread, parts.at, treatment, axis=1)


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
