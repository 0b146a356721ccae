"""Fixed effects: the rows they leave, what is left of a column, the coefficients they cost."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy import sparse
from scipy.sparse import csgraph

from pipeline.core.estimate import EstimationFailed
from pipeline.core.prices import Booleans, Floats, Integers
from pipeline.estimators.algebra import refusal
from pipeline.estimators.covariance import groups_of, intersection, recoded

ORTHOGONAL = 1e-9
CLOSE = (1e-10, 1e-13)
"""How far the gradients of each round go, relative to the sums they begin with."""
FLAT = 1e-13
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


def demean(Y: Floats, effects: Effects) -> Floats:
    """Y (n, m) less its projection on the effects' indicators.

    One effect: exact. Several: the normal equations of their levels, the largest effect
    eliminated, by conjugate gradients, all m columns at once; an iteration passes over pairs of
    levels that share a row and never over the rows (Gaure 2013; Correia 2017). What is left is
    projected once more, so that rounding does not stay. The result is accepted only when every
    group's mean is zero to 1e-9 of the column's spread.

    Raises:
        EstimationFailed: if the gradients do not converge.
    """
    groups = sorted((recoded(codes) for codes in effects.values()), key=lambda c: -int(c.max()))
    centred = Y - Y.mean(axis=0)
    if len(groups) == 1:
        # Twice: the second pass takes out the rounding of the first.
        return _centred(_centred(centred, groups[0]), groups[0])
    spread = np.linalg.norm(centred, axis=0)
    left = centred / np.where(spread > 0, spread, 1.0)
    levels = Levels.of(groups)
    whole = sums = levels.sums(left)
    for close in CLOSE:
        left = left - levels.spread(levels.solved(sums, close * levels.size(whole)))
        sums = levels.sums(left)
    if not levels.worst(sums) <= ORTHOGONAL:
        raise EstimationFailed("the fixed effects could not be absorbed: no convergence")
    return np.asarray(left * spread)


def _centred(Y: Floats, codes: Integers) -> Floats:
    """Y (n, m) less its group means."""
    sizes = np.bincount(codes)
    means = [(np.bincount(codes, weights=column) / sizes)[codes] for column in Y.T]
    return np.asarray(Y - np.column_stack(means))


@dataclass(frozen=True, slots=True, eq=False)
class Levels:
    """The P levels of all effects, those of the largest first, and the rows they share.

    Attributes:
        rows: (n, P) indicators; columns: (P, n), the same transposed.
        sizes: (P,) rows of each level.
        first: levels of the largest effect.
        across: (first, P - first) rows that one of its levels shares with another's.
        others: (P - first, P - first) the same among the other effects.
    """

    rows: sparse.csr_matrix
    columns: sparse.csr_matrix
    sizes: Floats
    first: int
    across: sparse.csr_matrix
    others: sparse.csr_matrix

    @classmethod
    def of(cls, groups: list[Integers]) -> Levels:
        """The levels of effects (n,) coded from 0 without gaps, the largest first."""
        counts = [np.bincount(codes) for codes in groups]
        starts = np.cumsum([0, *(len(c) for c in counts)])
        n, P = len(groups[0]), int(starts[-1])
        shifted = np.column_stack([c + at for c, at in zip(groups, starts, strict=False)])
        ends = np.arange(0, shifted.size + 1, len(groups))
        rows = sparse.csr_matrix((np.ones(shifted.size), shifted.ravel(), ends), shape=(n, P))
        first = len(counts[0])
        columns = rows.T.tocsr()
        rest = rows[:, first:]
        return cls(
            rows,
            columns,
            np.concatenate(counts).astype(np.float64),
            first,
            (columns[:first] @ rest).tocsr(),
            (columns[first:] @ rest).tocsr(),
        )

    def sums(self, Y: Floats) -> Floats:
        """(P, m) sums of Y (n, m) within each level."""
        return np.asarray(self.columns @ Y)

    def spread(self, values: Floats) -> Floats:
        """(n, m) sums over a row's levels of ``values`` (P, m)."""
        return np.asarray(self.rows @ values)

    def worst(self, sums: Floats) -> float:
        """The largest mean of a level."""
        return float(np.abs(sums / self.sizes[:, None]).max(initial=0.0))

    def size(self, sums: Floats) -> Floats:
        """(m,) root of the summed squares of ``sums`` (P, m) over the levels' sizes."""
        return np.asarray(np.sqrt(np.einsum("ij,ij->j", sums, sums / self.sizes[:, None])))

    def solved(self, sums: Floats, close: Floats) -> Floats:
        """(P, m) values of the levels whose projection has these ``sums`` (P, m), to ``close``."""
        n1 = self.sizes[: self.first, None]
        top, rest = sums[: self.first], sums[self.first :]
        back = self.across.T.tocsr()
        weight = 1 / self.sizes[self.first :, None]

        def schur(x: Floats) -> Floats:
            return np.asarray(self.others @ x - back @ ((self.across @ x) / n1))

        lower = _conjugate(rest - back @ (top / n1), schur, weight, close)
        return np.concatenate([(top - self.across @ lower) / n1, lower])


def _conjugate(
    b: Floats, apply: Callable[[Floats], Floats], weight: Floats, close: Floats
) -> Floats:
    """(q, m) solutions of apply(x) = b, preconditioned by ``weight`` (q, 1), all at once.

    Until the weighted residual of each column is at most ``close`` (m,).
    """
    x = np.zeros_like(b)
    residual = b
    scaled = weight * residual
    direction = scaled
    size = np.einsum("ij,ij->j", residual, scaled)
    for _ in range(MOST_ITERATIONS):
        # A finished column is left alone: more steps would only follow its rounding errors.
        active = size > close**2
        if not active.any():
            break
        direction = direction * active
        image = apply(direction)
        curvature = np.einsum("ij,ij->j", direction, image)
        # Levels may shift against one another and leave the rows alone: no step is taken there.
        flat = curvature <= FLAT * np.einsum("ij,ij->j", direction, direction / weight)
        step = _ratio(size, np.where(flat, 0.0, curvature))
        x = x + step * direction
        residual = residual - step * image
        scaled = weight * residual
        new = np.where(flat, 0.0, np.einsum("ij,ij->j", residual, scaled))
        direction = scaled + _ratio(new, size) * direction
        size = new
    return x


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
