"""Limited-information maximum likelihood and Fuller's estimator.

Both solve X'(I - κM_Z)(y - Xb) = 0 with κ at or near the smallest root that makes the two
reduced forms agree. κ = 1 is two-stage least squares, κ = 0 least squares (Theil 1958).
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import Estimate, EstimationFailed
from pipeline.core.prices import Floats
from pipeline.estimators.algebra import solve
from pipeline.estimators.errors import (
    Sandwich,
    degrees_of_freedom,
    of_influence,
    positive,
)
from pipeline.estimators.instrument_tests import Second, smallest_root
from pipeline.estimators.instruments import EXACT, with_weak_instrument_checks
from pipeline.estimators.stages import Parts, parts_of
from pipeline.estimators.wild_instruments import Weights

ANDERSON_RUBIN = "Anderson and Rubin (1949)"
FULLER = "Fuller (1977)"
STOCK_YOGO_LIML_SIZE = {
    2: (8.68, 5.33, 4.42, 3.92),
    3: (6.46, 4.36, 3.69, 3.32),
}
"""Instruments -> first-stage F for a largest 5% test size of limited-information maximum
likelihood of 10, 15, 20, 25%: Stock and Yogo (2005), table 5.4."""


def limited_information(design: Design, options: FitOptions) -> Estimate:
    """Limited-information maximum likelihood: κ is the smallest root of |Y'Y - κ Y'M_Z Y| = 0.

    X (n, k), Z (n, L), effects, errors, sets, tests and stages as in
    :func:`~pipeline.estimators.instruments.two_stage_least_squares`, with which it coincides when
    there are as many instruments as endogenous variables. Nearly median-unbiased when instruments
    are many or weak, at the price of heavier tails: it has no mean (Anderson and Rubin 1949;
    Mariano and Sawa 1972).

    The covariance is the sandwich of the equations solved, rows (x - κ M_Z x)u; ``classical`` is
    s²(X'(I - κM_Z)X)⁻¹ with divisor n - k. ``fit`` adds kappa. df: as in two-stage least squares,
    G - 1 with clusters and n - k without.

    Raises:
        InputProblem: see :func:`~pipeline.estimators.stages.parts_of`.
        EstimationFailed: if the effects cannot be absorbed, the fit is exact, X'(I - κM_Z)X is
            not positive or a variance is not.
    """
    parts = parts_of(design, options)
    column = _column(design, options, parts, a=0)
    one = len(parts.endogenous) == 1
    sizes = STOCK_YOGO_LIML_SIZE.get(len(parts.instruments), ()) if one else ()
    named = zip((10, 15, 20, 25), sizes, strict=False)
    return replace(
        column,
        estimator="limited_information",
        title="Limited-information maximum likelihood",
        fit={**column.fit, **{f"stock_yogo_liml_size_{size}": value for size, value in named}},
        citation=ANDERSON_RUBIN,
    )


def fuller(design: Design, options: FitOptions) -> Estimate:
    """Fuller's estimator with a = 1: κ less 1/(n - L - k), k counting controls and effects.

    Nearly unbiased, with finite moments where limited-information maximum likelihood has none
    (Fuller 1977). Arrays, errors, sets, tests, stages and problems as in
    :func:`limited_information`; ``fit`` adds kappa.
    """
    parts = parts_of(design, options)
    column = _column(design, options, parts, a=1)
    return replace(column, estimator="fuller", title="Fuller (a = 1)", citation=FULLER)


def _root(parts: Parts) -> float:
    if len(parts.instruments) == len(parts.endogenous):
        return 1.0
    # An exact fit leaves the root without a value: two stages find it out first.
    second_stage(parts, 1.0)
    return smallest_root(parts)


def _less(parts: Parts, a: int) -> float:
    return a / (parts.sample.n - parts.k_first - parts.sample.absorbed)


def _column(design: Design, options: FitOptions, parts: Parts, a: int) -> Estimate:
    def fit(some: Parts) -> Second:
        return second_stage(some, _root(some) - _less(some, a))

    weights = Weights(root=True, less=_less(parts, a))
    kappa = _root(parts) - weights.less
    column = with_weak_instrument_checks(design, options, parts, fit, weights)
    notes = column.notes
    if len(parts.instruments) > 1 and len(parts.endogenous) == 1:
        # Kolesár (2013), from memory.
        notes += (
            "Where effects differ between deals, this estimate need not be an average of them, "
            "as that of two-stage least squares is.",
        )
    return replace(column, fit={**column.fit, "kappa": kappa}, notes=notes)


def second_stage(parts: Parts, kappa: float) -> Second:
    """Coefficients (k,) of the k-class estimator at ``kappa``, and their sandwich.

    M_Z leaves nothing of the controls, so that only the endogenous columns differ between
    X and X - κM_Z X.

    Raises:
        EstimationFailed: if X'(I - κM_Z)X is not positive, the fit is exact or a variance is not
            positive.
    """
    sample = parts.sample
    size = np.linalg.norm(parts.E, axis=0)
    rest = solve(parts.Z, parts.E)[1]
    weighed = sample.X.copy()
    weighed[:, list(parts.places)] -= kappa * rest
    moments = (parts.E / size).T @ (parts.E / size) - kappa * (rest / size).T @ (rest / size)
    if not np.linalg.eigvalsh(moments)[0] > 0:
        raise EstimationFailed(f"the equations at κ = {kappa:.6g} have no stable solution")
    b, bread = _solved(weighed, sample.X, sample.y)
    u = sample.y - sample.X @ b
    if float(u @ u) <= EXACT * sample.total:
        raise EstimationFailed("the regressors fit the outcome exactly: no error is left")
    k = len(b)
    influence = np.asarray((weighed @ bread) * u[:, None])
    if sample.rule.kind == "classical":
        errors = Sandwich(
            np.asarray(bread * float(u @ u) / (sample.n - k - sample.counted)), influence
        )
    else:
        errors = of_influence(sample.rule, influence, k + sample.counted)
    df, sentence = degrees_of_freedom(sample.rule, k + sample.absorbed)
    return Second(b, u, errors, positive(errors.covariance, sample.names), df, sentence)


def _solved(weighed: Floats, X: Floats, y: Floats) -> tuple[Floats, Floats]:
    """Solution of W'(y - Xb) = 0 and the symmetric (W'X)⁻¹, columns scaled to unit length."""
    length = np.linalg.norm(X, axis=0)
    moments = (weighed / length).T @ (X / length)
    bread = np.linalg.inv((moments + moments.T) / 2) / np.outer(length, length)
    b = bread @ (weighed.T @ y)
    # One step of refinement: the residual's moments are then zero to rounding.
    b = b + bread @ (weighed.T @ (y - X @ b))
    return np.asarray(b), np.asarray(bread)
