"""Fixed effects: the rows they leave, what is left of a column, the coefficients they cost."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from scipy import sparse
from scipy.sparse import csgraph

from pipeline.core.estimate import EstimationFailed
from pipeline.core.prices import Booleans, Floats, Integers
from pipeline.estimators.algebra import refusal
from pipeline.estimators.covariance import groups_of, intersection, recoded

CONVERGED = 1e-13
ORTHOGONAL = 1e-9
MOST_ITERATIONS = 5_000
ABSORBED = 1e-7

Effects = dict[str, Integers]


def without_singletons(effects: Effects) -> Booleans:
    """(n,) rows left once groups of one row are dropped, again and again until none is.

    A singleton's effect fits its row exactly: it moves no coefficient, and kept it makes
    clustered errors too small (Correia 2015).
    """
    n = len(next(iter(effects.values())))
    keep = np.ones(n, dtype=np.bool_)
    while True:
        before = int(keep.sum())
        for codes in effects.values():
            sizes = np.bincount(codes[keep], minlength=int(codes.max(initial=0)) + 1)
            keep &= sizes[codes] != 1
        if int(keep.sum()) == before:
            return keep


def _centred(rows: Floats, codes: Integers, sizes: Floats) -> Floats:
    """``rows`` (m, n), each less its group means. Variables lie in rows, whole for bincount."""
    left = np.empty_like(rows)
    for at, row in enumerate(rows):
        left[at] = row - (np.bincount(codes, weights=row) / sizes)[codes]
    return left


def demean(Y: Floats, effects: Effects) -> Floats:
    """Y (n, m) less its projection on the effects' indicators.

    One effect: exact. Several: the alternating projections of von Neumann and Halperin, swept
    forth and back so that a sweep S is symmetric, and solved by conjugate gradients on
    (I - S)u = (I - S)y (Hernández-Ramos, Escalante and Raydan 2011; Correia 2017). The result
    is accepted only when every group's mean is zero to 1e-9 of the column's spread.

    Raises:
        EstimationFailed: if the projections do not converge.
    """
    groups = [recoded(codes) for codes in effects.values()]
    pairs = [(codes, np.bincount(codes).astype(np.float64)) for codes in groups]

    def sweep(block: Floats) -> Floats:
        for codes, size in (*pairs, *pairs[-2::-1]):
            block = _centred(block, codes, size)
        return block

    centred = np.ascontiguousarray(Y.T) - Y.mean(axis=0)[:, None]
    spread = np.linalg.norm(centred, axis=1)[:, None]
    unit = centred / np.where(spread > 0, spread, 1.0)
    if len(pairs) == 1:
        # Twice: the second pass takes out the rounding of the first.
        return np.asarray((sweep(sweep(unit)) * spread).T)
    left = _conjugate(unit, sweep)
    worst = max(
        float(np.abs(left - _centred(left, codes, size)).max(initial=0.0)) for codes, size in pairs
    )
    if not worst <= ORTHOGONAL:
        raise EstimationFailed("the fixed effects could not be absorbed: no convergence")
    return np.asarray((left * spread).T)


def _conjugate(Y: Floats, sweep: Callable[[Floats], Floats]) -> Floats:
    """Y (m, n) less the solution u of (I - S)u = (I - S)Y, all variables at once."""
    residual = Y - sweep(Y)
    solution = np.zeros_like(Y)
    direction = residual.copy()
    size = np.einsum("ij,ij->i", residual, residual)
    for _ in range(MOST_ITERATIONS):
        # A finished variable is left alone: more steps would only follow its rounding errors.
        active = size > CONVERGED**2
        if not active.any():
            break
        direction *= active[:, None]
        image = direction - sweep(direction)
        step = _ratio(size, np.einsum("ij,ij->i", direction, image))
        solution += step[:, None] * direction
        residual -= step[:, None] * image
        new = np.einsum("ij,ij->i", residual, residual)
        direction = residual + _ratio(new, size)[:, None] * direction
        size = new
    return sweep(Y - solution)


def _ratio(above: Floats, below: Floats) -> Floats:
    positive = below > 0
    return np.where(positive, above / np.where(positive, below, 1.0), 0.0)


def refuse_absorbed(before: Floats, after: Floats, names: tuple[str, ...]) -> None:
    """Raise if a column (n, k) has no variation left, naming it.

    Raises:
        InputProblem: ``no_variation`` if it had none, ``absorbed`` if the effects took it.
    """
    had = np.linalg.norm(before - before.mean(axis=0), axis=0)
    size = np.linalg.norm(before, axis=0)
    left = np.linalg.norm(after, axis=0)
    for at, name in enumerate(names):
        if had[at] <= 1e-12 * size[at]:
            raise refusal(
                "no_variation",
                name,
                "the same value in every deal",
                "a variable that varies",
                "drop it or widen the sample",
            )
        if left[at] <= ABSORBED * had[at]:
            raise refusal(
                "absorbed",
                name,
                "absorbed by the fixed effects",
                "variation within the groups of the effects",
                "drop the variable or the fixed effect that holds it constant",
            )


def nested(codes: Integers, clusters: dict[str, Integers]) -> bool:
    """Whether every group of ``codes`` (n,) lies inside one cluster of some dimension."""
    groups = groups_of(codes)
    return any(groups_of(intersection(codes, c)) == groups for c in clusters.values())


def components(first: Integers, second: Integers) -> int:
    """Connected components of the graph that links two effects' groups by the rows they share."""
    a, b = recoded(first), recoded(second)
    rows, columns = int(a.max()) + 1, int(b.max()) + 1
    links = sparse.coo_matrix((np.ones(len(a)), (a, b + rows)), shape=(rows + columns,) * 2)
    return int(csgraph.connected_components(links, directed=False)[0])


def coefficients_of(effects: Effects) -> int:
    """How many coefficients the effects are worth, the constant among them.

    Exact for one effect and for two (levels less connected components: Abowd, Creecy and
    Kramarz 2002). From the third on, each effect loses its largest number of components with
    an earlier one, so the count is an upper bound (Correia 2017).
    """
    count = 1
    earlier: list[Integers] = []
    for codes in effects.values():
        levels = groups_of(codes)
        lost = max((components(codes, other) for other in earlier), default=1)
        count += levels - lost
        earlier.append(codes)
    return count
