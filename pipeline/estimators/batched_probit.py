"""Many probits on the same rows with other weights at once, near one that is already fitted.

A replication gives each row a weight. Replications stand side by side in columns, so that
indices, gradients and curvatures of all of them are matrix products. The index of a replication
lies close to that of the fit, so its Mills ratio is a short Taylor series about the fitted
index; farther away it is computed in full.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from pipeline.core.prices import Booleans, Floats, Integers
from pipeline.estimators.probit import ProbitFit, mills

ROWS_AT_ONCE = 256
MOST_STEPS = 15
LEFT_OVER = 2e-5
CURVATURE_KEPT = 1e-4
HIGHEST_ORDER = 8
RADIUS = 2.5
SERIES_ERROR = 1e-6
FARTHEST = 8.0


@dataclass(frozen=True, slots=True, eq=False)
class Rows:
    """The rows of a probit about its fit.

    Attributes:
        U: (A, q) combinations of the regressors that the fit tells apart, so that their
            coefficients are in standard errors; those of rows that did not choose negated.
        root: (q, q) what turns coefficients of U into those of the regressors.
        base: (A,) fitted index, likewise negated.
        series: (HIGHEST_ORDER + 1, A) Taylor coefficients of the Mills ratio at ``base``.
        codes: (A,) the cluster of each row, 0 to G - 1.
        gradient: (G, q) scores at the fit by cluster.
        curvature: (G, q(q + 1)/2) minus second derivatives by cluster, upper triangle.
    """

    U: Floats
    root: Floats
    base: Floats
    series: Floats
    codes: Integers
    gradient: Floats
    curvature: Floats


def mills_series(index: Floats) -> Floats:
    """(HIGHEST_ORDER + 1, A) Taylor coefficients of m = φ/Φ at ``index`` (A,).

    m' = -m(m + a) gives (j + 1)c_{j+1} = -Σ_i c_i c_{j-i} - a c_j - c_{j-1}. The nearest zero of
    Φ in the complex plane lies 2.7 away from the real line or farther, so terms fall faster than
    powers of d/2.5.
    """
    c = np.empty((HIGHEST_ORDER + 1, len(index)))
    c[0] = mills(index)
    for j in range(HIGHEST_ORDER):
        total = -index * c[j] - sum(c[i] * c[j - i] for i in range(j + 1))
        c[j + 1] = (total - c[j - 1] if j else total) / (j + 1)
    return c


def rows_about(fit: ProbitFit, W: Floats, chosen: Booleans, codes: Integers) -> Rows:
    """The rows W (A, q) with choices ``chosen`` (A,) and clusters ``codes`` (A,) about ``fit``."""
    root = np.asarray(np.linalg.cholesky(fit.information), dtype=np.float64)
    signs = np.where(chosen, 1.0, -1.0)
    U, base = (W @ root) * signs[:, None], signs * fit.index
    series = mills_series(base)
    ratio = series[0]
    groups = int(codes.max()) + 1
    pairs = products(U)
    return Rows(
        U=U,
        root=root,
        base=base,
        series=series,
        codes=codes,
        gradient=summed(U * ratio[:, None], codes, groups),
        curvature=summed(pairs * (ratio * (ratio + base))[:, None], codes, groups),
    )


def summed(rows: Floats, codes: Integers, groups: int) -> Floats:
    """(groups, k) sums of ``rows`` (A, k) by cluster."""
    return np.column_stack([np.bincount(codes, column, minlength=groups) for column in rows.T])


def products(X: Floats) -> Floats:
    """(A, k(k + 1)/2) products of the columns of X (A, k), those of its upper triangle."""
    first, second = np.triu_indices(X.shape[1])
    return np.asarray(X[:, first] * X[:, second])


def symmetric(triangle: Floats, k: int) -> Floats:
    """(B, k, k) matrices of their upper triangles (k(k + 1)/2, B)."""
    first, second = np.triu_indices(k)
    full = np.empty((triangle.shape[1], k, k))
    full[:, first, second] = triangle.T
    full[:, second, first] = triangle.T
    return full


def fit_weighted(rows: Rows, counts: Floats) -> tuple[Floats, Booleans]:
    """The probits of B replications, ``counts`` (G, B) times each cluster.

    Newton's steps from the common fit; a curvature is used again once the step is short. Two
    decrements in a row give the constant of the quadratic convergence, and with it how far the
    maximum lies from the last step: it ends below a ten-thousandth of a standard error.

    Returns:
        (q, B) coefficients of U less those of the fit, and (B,) whether they are maxima: steps
        that do not settle or lead farther than eight standard errors are none.
    """
    q, draws = rows.U.shape[1], counts.shape[1]
    H = symmetric(rows.curvature.T @ counts, q)
    delta, decrement = _moved(np.zeros((q, draws)), rows.gradient.T @ counts, H)
    settled = np.zeros(draws, dtype=np.bool_)
    for _ in range(MOST_STEPS):
        live = np.flatnonzero(~settled & _near(delta))
        if live.size == 0:
            break
        again = bool((decrement[live] < CURVATURE_KEPT).all())
        g, triangle = _derivatives(rows, delta[:, live], counts[:, live], curvature=not again)
        if not again:
            H[live] = symmetric(triangle, q)
        before = decrement[live]
        delta[:, live], decrement[live] = _moved(delta[:, live], g, H[live])
        settled[live] = decrement[live] ** 1.5 < LEFT_OVER * before
    return delta, settled & _near(delta)


def _near(delta: Floats) -> Booleans:
    with np.errstate(invalid="ignore"):
        return np.asarray((np.abs(delta) <= FARTHEST).all(axis=0))


def _moved(delta: Floats, g: Floats, H: Floats) -> tuple[Floats, Floats]:
    """One Newton step, NaN where the curvature is singular, and its decrement g'H⁻¹g."""
    try:
        move = np.linalg.solve(H, g.T[:, :, None])[:, :, 0].T
    except np.linalg.LinAlgError:
        move = np.full_like(g, np.nan)
        for at, (matrix, slope) in enumerate(zip(H, g.T, strict=True)):
            if np.linalg.cond(matrix) < 1e14:
                move[:, at] = np.linalg.solve(matrix, slope)
    return delta + move, np.asarray((g * move).sum(axis=0))


def ratios(rows: Rows, here: slice | Integers, distance: Floats) -> Floats:
    """(R, B) Mills ratios of the rows ``here`` at ``distance`` (R, B) from their fitted index."""
    farthest = float(np.abs(distance).max(initial=0.0))
    order = next(
        (k for k in range(1, HIGHEST_ORDER + 1) if (farthest / RADIUS) ** (k + 1) < SERIES_ERROR),
        0,
    )
    if not order:
        return mills(rows.base[here][:, None] + distance)
    series = rows.series[:, here, None]
    ratio = distance * series[order]
    for k in range(order - 1, 0, -1):
        ratio += series[k]
        ratio *= distance
    ratio += series[0]
    return np.asarray(ratio)


def _derivatives(
    rows: Rows, delta: Floats, counts: Floats, *, curvature: bool
) -> tuple[Floats, Floats]:
    """Gradients (q, B) and, if asked for, curvatures (q(q + 1)/2, B) at ``delta`` (q, B).

    A curvature only directs the step, and that of U is close to the unit matrix: single
    precision is enough for it.
    """
    q, draws = delta.shape
    one, other = np.triu_indices(q)
    g, H = np.zeros((q, draws)), np.zeros((q * (q + 1) // 2, draws))
    for start in range(0, len(rows.base), ROWS_AT_ONCE):
        here = slice(start, start + ROWS_AT_ONCE)
        U = rows.U[here]
        index = U @ delta
        ratio = ratios(rows, here, index)
        weighted = ratio * counts[rows.codes[here]]
        g += U.T @ weighted
        if curvature:
            index += rows.base[here][:, None]
            index += ratio
            index *= weighted
            T = U.T.astype(np.float32)
            H += (T[one] * T[other]) @ index.astype(np.float32)
    return g, H
