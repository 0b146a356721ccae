"""The Anderson-Rubin set of the treatment's coefficient when others are endogenous too.

The joint test accepts a region of coefficients; its shadow on the treatment's axis is the set of
values that some value of the others makes acceptable. It covers at least as often as it says,
however weak the instruments (Dufour and Taamouti 2005).
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from scipy import linalg, optimize

from pipeline.core.estimate import ConfidenceSet
from pipeline.core.prices import Floats
from pipeline.estimators.anderson_rubin import (
    ReducedForms,
    accepts_nothing,
    from_angles,
    in_own_units,
    silent_set,
)

CITATION = "Dufour and Taamouti (2005)"
METHOD = "projection of the joint Anderson-Rubin test, which covers at least as often as it says"
STARTS = 32
POLISHED = 3
ANGLES = 60
NEAREST, AROUND = 1e-6, 40


def projected_set(forms: ReducedForms, level: float) -> ConfidenceSet:
    """{a: some values of the other coefficients make the joint test accept at 1 - ``level``}.

    ``forms`` with m > 2 columns. With one other coefficient each a is decided exactly, by the
    roots of a pencil; with more the statistic is minimised from the least eigenvalues it would
    have under one variance and from a fixed set of directions. The ends are found on the scale
    θ = arctan(a), searched around the overall minimum on all scales and over the line.
    """
    if forms.silent:
        return silent_set(level)
    unit, scale = in_own_units(forms)
    bound, m = unit.bound(level), unit.columns.shape[1]

    def excess(theta: float) -> float:
        ray = np.zeros((m, 1))
        ray[0, 0], ray[1, 0] = np.cos(theta), -np.sin(theta)
        space = np.column_stack([ray, np.eye(m)[:, 2:]])
        if m == 3:
            return 1.0 if accepts_nothing(combined(unit, space), bound) else -1.0
        return smallest(unit, space)[0] - bound

    best = smallest(unit, np.eye(m))[1]
    centre = float(np.arctan2(-best[1], best[0]))
    steps = np.geomspace(NEAREST, 1.0, AROUND)
    near = centre + np.concatenate([-steps, [0.0], steps])
    everywhere = np.concatenate([near, np.linspace(0, np.pi, ANGLES, endpoint=False)])
    # From -π/2 on, for tangents to be read in order.
    middles = np.unique((everywhere + np.pi / 2) % np.pi) - np.pi / 2
    return from_angles(middles, excess, scale, level, METHOD)


def combined(forms: ReducedForms, space: Floats) -> ReducedForms:
    """The forms of the combinations ``space`` (m, q) of the columns; the first explains."""
    L = len(forms.outcome)
    both = np.kron(space.T, np.eye(L))
    columns = forms.columns @ space
    return replace(
        forms,
        outcome=columns[:, 0],
        treatment=columns[:, 1],
        others=columns[:, 2:],
        covariance=both @ forms.covariance @ both.T,
    )


def smallest(forms: ReducedForms, space: Floats) -> tuple[float, Floats]:
    """The least statistic over weights in the span of ``space`` (m, q), and the weights (m,)."""
    L, q = len(forms.outcome), space.shape[1]
    made = combined(forms, space)
    columns, blocks = made.columns, made.covariance.reshape(q, L, q, L)

    def value(x: Floats) -> tuple[float, Floats]:
        spread = np.einsum("j,jkbl,b->kl", x, blocks, x)
        w = np.linalg.solve(spread, columns @ x)
        slope = columns.T @ w - np.einsum("k,jkbl,l->jb", w, blocks, w) @ x
        return float(w @ (columns @ x)), 2 * slope

    starts = _starts(columns, blocks)
    spreads = np.einsum("nj,jkbl,nb->nkl", starts, blocks, starts)
    sides = starts @ columns.T
    values = np.einsum("nl,nl->n", sides, np.linalg.solve(spreads, sides[:, :, None])[:, :, 0])
    found = []
    for at in np.argsort(values)[:POLISHED]:
        result = optimize.minimize(value, starts[at], jac=True, method="BFGS")
        found.append((float(result.fun), result.x))
    least, x = min(found, key=lambda pair: pair[0])
    return least, np.asarray(space @ x)


def _starts(columns: Floats, blocks: Floats) -> Floats:
    """(s, q) unit vectors: the minimisers under one variance, then directions spread evenly."""
    q = columns.shape[1]
    spread = np.einsum("jkbk->jb", blocks)
    vectors = linalg.eigh(columns.T @ columns, (spread + spread.T) / 2)[1].T
    rng = np.random.default_rng(0)
    both = np.concatenate([vectors, rng.normal(size=(STARTS * (q - 1), q))])
    return np.asarray(both / np.linalg.norm(both, axis=1)[:, None])
