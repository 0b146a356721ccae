"""The reduced forms that an Anderson-Rubin test is made of, held to its level with few clusters.

Read against F(L, G - 1) with CR1 errors the test rejects a true value far too often: the more
instruments and the fewer and less even the clusters, the worse. CR3 errors and the degrees of
freedom of Hotelling's T² that fit the clusters hold the level; with many clusters both do the
same.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from pipeline.core.findings import InputProblem
from pipeline.core.prices import Floats, Integers
from pipeline.estimators.algebra import orthonormal, refusal
from pipeline.estimators.anderson_rubin import ReducedForms
from pipeline.estimators.covariance import cluster_covariance, intersection, recoded
from pipeline.estimators.errors import CLUSTER, positive
from pipeline.estimators.few_clusters import LOADED, Basis, adjusted, span_of
from pipeline.estimators.stages import Parts, reduced_forms, turned

CR3_POWER = 1.0


def inverted_forms(parts: Parts) -> ReducedForms:
    """What :func:`~pipeline.estimators.anderson_rubin.anderson_rubin_test` is to be given.

    Without clusters the reduced forms as they are. With one dimension their CR3 covariance (Bell
    and McCaffrey 2002) and η degrees of freedom of Hotelling's T², matched to the first two
    moments the covariance has under independent errors (Pustejovsky and Tipton 2018, eq. 15, who
    use CR2; CR3 is the larger and holds the level where the errors are not independent).

    Two dimensions: V₁ + V₂ - V₁₂ for one instrument; for several V₁ + V₂, since the difference
    need not be positive and rejects far too often then. η is the smaller of the two. Where the
    effects have too many levels to be laid out, CR1 with η = G - 1.

    Raises:
        InputProblem: ``cluster_decides`` if one cluster alone moves a combination of the
            instruments.
    """
    forms = reduced_forms(parts)
    if parts.sample.rule.kind != CLUSTER:
        return forms
    basis = orthonormal(parts.Z)
    columns = np.column_stack([parts.y, parts.E])
    pi = basis.T @ columns
    left = columns - basis @ pi
    turn, back = turned(pi, left)
    try:
        V, eta = _covariance(parts, basis, left @ turn)
    except TooManyLevels:
        return replace(forms, hotelling=float(min(parts.sample.rule.counts.values()) - 1))
    V, floored = _floored(V)
    carry = np.kron(back, np.eye(basis.shape[1]))
    heads = ("outcome on", *(f"first stage of {name}" for name in parts.endogenous))
    names = tuple(f"{of} {z}" for of in heads for z in parts.instruments)
    covariance = positive(np.asarray(carry @ V @ carry.T), names)
    return ReducedForms(pi[:, 0], pi[:, 1], covariance, forms.df, floored, pi[:, 2:], eta)


class TooManyLevels(Exception):
    """The effects that cut across the clusters are too many to be laid out."""


def _covariance(parts: Parts, basis: Floats, left: Floats) -> tuple[Floats, float]:
    """(mL, mL) covariance of ``basis``'(columns), residuals ``left`` (n, m); and η."""
    dimensions = list(parts.sample.rule.clusters.values())
    found = [_of_one(parts, basis, left, codes) for codes in dimensions]
    V = np.asarray(sum(one for one, _ in found))
    if len(dimensions) > 1 and basis.shape[1] == 1:
        rows = np.concatenate([basis * column[:, None] for column in left.T], axis=1)
        k = parts.k_first + parts.sample.counted
        V = V - cluster_covariance(rows, intersection(*dimensions), k)
    return V, min(eta for _, eta in found)


def _of_one(parts: Parts, basis: Floats, left: Floats, codes: Integers) -> tuple[Floats, float]:
    try:
        Q = np.column_stack([basis, orthonormal(parts.controls)])
        span = span_of(parts.sample, parts.design, codes, Q)
    except InputProblem as problem:
        raise TooManyLevels from problem
    L = basis.shape[1]
    scores, squares, cross = [], [], []
    for rows in Basis(span, basis, recoded(codes)).rows():
        loads, lost = adjusted(span[rows], basis[rows], CR3_POWER)
        if (lost > LOADED).any():
            names = parts.sample.rule.clusters
            name = next(key for key, value in names.items() if value is codes)
            raise one_cluster_decides(name, parts.instruments)
        scores.append((left[rows].T @ loads).ravel())
        squares.append(loads.T @ loads)
        cross.append(span[rows].T @ loads)
    G, made = len(scores), np.array(scores)
    eta = degrees_of_freedom(np.array(squares), np.array(cross)) if L < G else 0.0
    return np.asarray((G - 1) / G * (made.T @ made)), eta


def one_cluster_decides(name: str, instruments: tuple[str, ...]) -> InputProblem:
    """The refusal where a combination of the instruments varies in one cluster by ``name`` only."""
    listed = ", ".join(instruments)
    return refusal(
        "cluster_decides",
        listed,
        f"one cluster by {name} alone moves a combination of {listed}",
        "instruments that vary in at least two clusters",
        "cluster by a finer dimension, or take the instrument out",
    )


def degrees_of_freedom(squares: Floats, cross: Floats) -> float:
    """η = q(q + 1)/Σ_st Var(D_st), D the covariance estimate in units of its mean.

    The G scores are P_g'ε with P_g'P_h = δ_gh ``squares`` (G, q, q) - ``cross``_g'``cross``_h,
    cross (G, p, q), ε independent of one variance (Pustejovsky and Tipton 2018, eq. 15). For
    q = 1 it is Satterthwaite's.
    """
    q = squares.shape[1]
    mean = (squares - np.einsum("gpi,gpj->gij", cross, cross)).sum(axis=0)
    values, vectors = np.linalg.eigh(mean)
    root = vectors * values**-0.5 @ vectors.T
    S, C = root @ squares @ root, cross @ root
    # Sums over all pairs of clusters, by p × p products in place of G × G ones.
    pairs = np.einsum("gps,gqt->stpq", C, C, optimize=True)
    whole = float(np.sum(pairs * pairs) + np.sum(pairs * np.swapaxes(pairs, 2, 3)))
    own = np.einsum("gpi,gpj->gij", C, C)
    return float(q * (q + 1) / (whole + _size(S - own) - _size(own)))


def _size(blocks: Floats) -> float:
    traces = np.trace(blocks, axis1=1, axis2=2)
    return float(np.sum(traces**2) + np.einsum("gij,gji->", blocks, blocks))


def _floored(total: Floats) -> tuple[Floats, bool]:
    """Negative eigenvalues set to zero (Cameron, Gelbach and Miller 2011)."""
    scale = np.sqrt(np.maximum(np.abs(np.diag(total)), 1e-300))
    values, vectors = np.linalg.eigh(total / np.outer(scale, scale))
    if values[0] >= -1e-12 * values[-1]:
        return total, False
    repaired = vectors * np.maximum(values, 0.0) @ vectors.T
    return np.asarray(repaired * np.outer(scale, scale)), True
