"""Batched least squares, one regression a row, deviations from the means first."""

from __future__ import annotations

import numpy as np

from pipeline.core.prices import Booleans, Floats

SINGULAR = 1e-12
ROUNDING = 1e-24


def least_squares(
    y: Floats,
    x: Floats,
    used: Booleans | None = None,
    constant: bool = True,
    weights: Floats | None = None,
) -> tuple[Floats, Floats, Floats]:
    """Least squares of every row, weighted if asked.

    Args:
        y: (n, E); values where ``used`` is false are ignored.
        x: (k, n, E) regressors but the constant; k may be 0.
        used: (n, E), or None for every value.
        constant: whether each regression has a constant, its first parameter.
        weights: (n, E) inverses of the relative variances, or None for equal ones.

    Returns:
        (n, d) parameters, (n, d, d) inverse of X'WX and (n, E) residuals times the root of their
        weight, d = k + constant. NaN for a row whose regressors are collinear or whose
        observations are too few.
    """
    n, k = len(y), len(x)
    if used is not None:
        y, x = np.where(used, y, 0.0), np.where(used, x, 0.0)
    weight = _weight(y.shape, used, weights)
    total = weight.sum(axis=1)
    total[total == 0] = np.nan
    y_mean, x_mean = np.zeros(n), np.zeros((n, k))
    if constant:
        y_mean = np.vecdot(weight, y) / total
        x_mean = (np.vecdot(weight, x) / total).T
    root = weight if weights is None else np.sqrt(weight)
    yc = root * (y - y_mean[:, None])
    xc = root * (x - x_mean.T[:, :, None])
    inverse = inverses(moments(xc), ROUNDING * total[:, None] * x_mean**2)
    slope = np.matmul(inverse, np.vecdot(xc, yc).T[:, :, None])[..., 0]
    for at in range(k):
        yc -= slope[:, at, None] * xc[at]
    if not constant:
        return slope, inverse, yc
    parameters = np.column_stack([y_mean - np.vecdot(x_mean, slope), slope])
    return parameters, with_constant(inverse, x_mean, total), yc


def _weight(shape: tuple[int, ...], used: Booleans | None, weights: Floats | None) -> Floats:
    """(n, E) weights, zero where a value is not used."""
    weight = np.ones(shape) if weights is None else weights
    return weight if used is None else np.where(used, weight, 0.0)


def moments(x: Floats) -> Floats:
    """(n, k, k) sums of products of (k, n, E)."""
    k, n = x.shape[:2]
    out = np.empty((n, k, k))
    for i in range(k):
        out[:, i, i:] = out[:, i:, i] = np.vecdot(x[i], x[i:]).T
    return out


def with_constant(inverse: Floats, mean: Floats, total: Floats) -> Floats:
    """(n, k + 1, k + 1) inverse of X'X with a constant first.

    Args:
        inverse: (n, k, k) of the regressors' moments about their means.
        mean: (n, k) those means.
        total: (n,) observations, or the sum of their weights.
    """
    n, k = mean.shape
    lean = np.matmul(inverse, mean[:, :, None])[..., 0]
    bread = np.empty((n, k + 1, k + 1))
    bread[:, 0, 0] = 1 / total + np.vecdot(lean, mean)
    bread[:, 0, 1:] = bread[:, 1:, 0] = -lean
    bread[:, 1:, 1:] = inverse
    return bread


def inverses(products: Floats, rounding: Floats) -> Floats:
    """(n, k, k) inverses of (n, k, k) moments; NaN where singular to working precision.

    ``rounding`` (n, k) is the size of sums of squares that are what is left of a constant.
    """
    spread = np.einsum("nii->ni", products)
    moves = (spread > rounding) & (spread > 0)
    if products.shape[1] <= 1:
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(moves[:, :, None], 1 / products, np.nan)
    scale = np.sqrt(spread)
    with np.errstate(divide="ignore", invalid="ignore"):
        correlation = products / (scale[:, :, None] * scale[:, None, :])
    good = np.isfinite(correlation).all(axis=(1, 2)) & moves.all(axis=1)
    good[good] = np.linalg.eigvalsh(correlation[good])[:, 0] > SINGULAR
    inverse = np.full_like(products, np.nan)
    outer = scale[good][:, :, None] * scale[good][:, None, :]
    inverse[good] = np.linalg.inv(correlation[good]) / outer
    return inverse
