"""The wild restricted efficient bootstrap of an instrumented coefficient, on cluster moments.

A draw multiplies each cluster's residuals of outcome and endogenous variables, made under the
null, by one weight and refits both stages. Every column of the refit lies in the span of the
instruments, the controls and the residuals, cluster by cluster, so that a draw needs the
clusters' second moments and never the rows; moving the null only combines these anew.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from scipy import optimize

from pipeline.core.design import FitOptions
from pipeline.core.estimate import ConfidenceSet, NotApplicable, Shape, Tested, TestResult
from pipeline.core.findings import InputProblem
from pipeline.core.prices import Floats
from pipeline.estimators import wild
from pipeline.estimators.algebra import orthonormal
from pipeline.estimators.covariance import cluster_factor, recoded
from pipeline.estimators.errors import CLUSTER
from pipeline.estimators.few_clusters import span_of
from pipeline.estimators.stages import Parts

CITATION = "Davidson and MacKinnon (2010); MacKinnon, Nielsen and Webb (2023)"
NAME = "Wild restricted efficient bootstrap"
MOST_GROUPS = 200
FARTHEST = 1e4
FINENESS = 1e-4


@dataclass(frozen=True, slots=True)
class Weights:
    """κ of a k-class refit: its smallest root or one, ``less`` a constant."""

    root: bool = False
    less: float = 0.0


TWO_STAGES = Weights()


@dataclass(frozen=True, slots=True)
class Bootstrapped:
    """The test that the treatment's coefficient is zero, and the values that are not rejected.

    No set where the test is not applicable.
    """

    test: Tested
    set: ConfidenceSet | None = None


@dataclass(frozen=True, slots=True, eq=False)
class Moments:
    """Second moments of the columns [Q, E, y, K] within each of G clusters.

    Attributes:
        grams: (G, b, b), b = L + p + 1 + q: L orthonormal instruments, p endogenous variables,
            the outcome, q orthonormal controls and effects, the controls taken out of all others.
        L, p: how many instruments and endogenous variables.
        factor: the square root of CR1's factor.
    """

    grams: Floats
    L: int
    p: int
    factor: float

    @property
    def groups(self) -> int:
        """Number of clusters."""
        return len(self.grams)


@dataclass(frozen=True, slots=True, eq=False)
class World:
    """What a draw is made of under one null.

    Attributes:
        grams: (G, b, b) moments of [Q, Ṽ, ũ, K] within clusters.
        Pi: (L, p) coefficients of the endogenous variables on Q, ũ held fixed.
    """

    grams: Floats
    Pi: Floats


def bootstrap(parts: Parts, options: FitOptions, weights: Weights | None) -> Bootstrapped | None:
    """Test and set of the treatment's coefficient; None unless asked for and clustered.

    One cluster dimension of at most 200 clusters, ``options.draws`` draws of Webb's weights up
    to 11 clusters and of signs from 12 on. Effects across the clusters are laid out as columns.
    Same data and seed, same answer. Not applicable, with a reason, beyond these limits.

    Source: Davidson and MacKinnon (2010), the residuals of the first stage made with the
    structural ones among the regressors; clusters as in MacKinnon, Nielsen and Webb (2023).
    """
    sample = parts.sample
    if weights is None or not options.draws or sample.rule.kind != CLUSTER:
        return None
    if len(sample.rule.clusters) > 1:
        return Bootstrapped(NotApplicable(NAME, "made for one cluster dimension"))
    if min(sample.rule.counts.values()) > MOST_GROUPS:
        reason = f"made for at most {MOST_GROUPS} clusters: with more, the usual errors do"
        return Bootstrapped(NotApplicable(NAME, reason))
    try:
        moments = moments_of(parts)
    except InputProblem:
        return Bootstrapped(NotApplicable(NAME, "the fixed effects have too many levels"))
    kind = wild.WEBB if moments.groups <= wild.FEW_FOR_SIGNS else wild.SIGNS
    draws = list(wild.weight_blocks(moments.groups, options.draws, kind, options.seed)[0])
    p = p_value(moments, weights, 0.0, draws, enumerated=False)
    estimate, error = estimated(moments, weights)
    test = TestResult(
        NAME,
        f"the coefficient of {parts.endogenous[0]} is zero",
        estimate / error,
        "empirical",
        p,
        caution="with very weak instruments read the Anderson-Rubin set",
        citation=CITATION,
        facts={"draws": float(options.draws), "clusters": float(moments.groups)},
    )
    return Bootstrapped(test, inverted(moments, weights, draws, options.level))


def moments_of(parts: Parts) -> Moments:
    """The clusters' second moments.

    Raises:
        InputProblem: as :func:`~pipeline.estimators.few_clusters.span_of`.
    """
    sample = parts.sample
    ((_, codes),) = sample.rule.clusters.items()
    K = span_of(sample, parts.design, codes, orthonormal(parts.controls))
    Q = orthonormal(parts.Z)
    columns = np.column_stack([Q, parts.E, parts.y, K])
    order = np.argsort(codes, kind="stable")
    cuts = np.cumsum(np.bincount(recoded(codes)))[:-1]
    grams = np.array([rows.T @ rows for rows in np.split(columns[order], cuts)])
    k = len(sample.names) + sample.counted
    factor = float(np.sqrt(cluster_factor(sample.n, len(grams), k)))
    return Moments(grams, Q.shape[1], parts.E.shape[1], factor)


def world_of(moments: Moments, null: float) -> World:
    """Residuals under the null that the treatment's coefficient is ``null``.

    ũ = y - null·D - Wγ̃, γ̃ of the other endogenous variables W by two-stage least squares;
    Ṽ = E - QΠ̃, Π̃ from the regression of E on Q, the controls and ũ.
    """
    L, p = moments.L, moments.p
    total = moments.grams.sum(axis=0)
    b = len(total)
    QE, Qy = total[:L, L : L + p], total[:L, L + p]
    u = np.zeros(b)
    u[L + p], u[L] = 1.0, -null
    if p > 1:
        u[L + 1 : L + p] = -np.linalg.lstsq(QE[:, 1:], Qy - null * QE[:, 0])[0]
    uu, uE, Qu = float(u @ total @ u), u @ total[:, L : L + p], total[:L] @ u
    rho = (uE - Qu @ QE) / (uu - float(Qu @ Qu))
    Pi = QE - np.outer(Qu, rho)
    turn = np.eye(b)
    turn[:L, L : L + p] = -Pi
    turn[:, L + p] = u
    return World(np.einsum("ji,gjk,kl->gil", turn, moments.grams, turn, optimize=True), Pi)


def ratios(moments: Moments, weights: Weights, world: World, v: Floats) -> tuple[Floats, Floats]:
    """(B,) refitted coefficient less the null, and its CR1 error, for weights v (B, G)."""
    L, p = moments.L, moments.p
    M, Pi = world.grams, world.Pi
    V, U, K = slice(L, L + p), L + p, slice(L + p + 1, None)
    q = M.shape[1] - L - p - 1
    B = len(v)
    Su = v @ M[:, :L, U]
    SV = (v @ M[:, :L, V].reshape(-1, L * p)).reshape(B, L, p)
    wu = v @ M[:, K, U]
    wV = (v @ M[:, K, V].reshape(-1, q * p)).reshape(B, q, p)
    theta = Pi + SV
    PE, PEu = np.einsum("bli,blj->bij", theta, theta), np.einsum("bli,bl->bi", theta, Su)
    kappa = np.full(B, 1 - weights.less)
    if weights.root or weights.less:
        N = _left(v, M, slice(L, U + 1), np.dstack([SV, Su]), np.dstack([wV, wu]))
        if weights.root and p < L:
            kappa = _roots(N, np.dstack([theta, Su])) - weights.less
        share = (1 - kappa)[:, None, None]
        PE, PEu = PE + share * N[:, :p, :p], PEu + share[:, :, 0] * N[:, :p, p]
    inverse = np.linalg.inv(PE)
    delta = np.einsum("bij,bj->bi", inverse, PEu)
    r = inverse[:, :, 0]
    scores = _scores(v, M, Pi, theta, (wu, wV), delta, r, kappa)
    return delta[:, 0], moments.factor * np.linalg.norm(scores, axis=1)


def _left(v: Floats, M: Floats, at: slice, S: Floats, w: Floats) -> Floats:
    """(B, 1 + p, 1 + p) moments of the drawn [Ṽ, ũ] off instruments and controls."""
    own = M[:, at, at]
    G, m = len(own), own.shape[1]
    whole = (v * v @ own.reshape(G, m * m)).reshape(len(v), m, m)
    whole = whole - np.einsum("bli,blj->bij", S, S)
    return np.asarray(whole - np.einsum("bli,blj->bij", w, w))


def _roots(N: Floats, P: Floats) -> Floats:
    """(B,) smallest root of |P'P + N - κN| = 0."""
    inverse = np.linalg.inv(np.linalg.cholesky(N))
    moved = np.einsum("bij,blj->bil", inverse, P)
    return 1 + np.linalg.eigvalsh(np.einsum("bil,bjl->bij", moved, moved))[:, 0]


def _scores(
    v: Floats,
    M: Floats,
    Pi: Floats,
    theta: Floats,
    w: tuple[Floats, Floats],
    delta: Floats,
    r: Floats,
    kappa: Floats,
) -> Floats:
    """(B, G) cluster sums of the refit's weighed regressor times its residual.

    Both are a part that is the same in all clusters and one that takes the cluster's weight, in
    the coordinates [Q, Ṽ, ũ, K]: x₀ + v_g x₁ and y₀ + v_g y₁.
    """
    (wu, wV), p, share = w, Pi.shape[1], (1 - kappa)[:, None]
    zeros = np.zeros((len(v), p + 1))
    x0 = share * (r @ Pi.T) + kappa[:, None] * np.einsum("bli,bi->bl", theta, r)
    y0 = np.column_stack([-delta @ Pi.T, zeros, np.einsum("bqi,bi->bq", wV, delta) - wu])
    y1 = np.column_stack([-delta, np.ones(len(v))])
    L = Pi.shape[0]
    Y = slice(L, L + p + 1)
    if not share.any():
        # Two stages: the weighed regressor lies in the instruments alone.
        return _form(x0, M[:, :L], y0) + v * _form(x0, M[:, :L, Y], y1)
    x0 = np.column_stack([x0, zeros, -share * np.einsum("bqi,bi->bq", wV, r)])
    x1 = share * r
    same = _form(x0, M, y0)
    once = _form(x1, M[:, L : L + p], y0) + _form(x0, M[:, :, Y], y1)
    return np.asarray(same + v * (once + v * _form(x1, M[:, L : L + p, Y], y1)))


def _form(x: Floats, M: Floats, y: Floats) -> Floats:
    """(B, G) x'M_g y, as one matrix product."""
    G = len(M)
    both = (x[:, :, None] * y[:, None, :]).reshape(len(x), -1)
    return np.asarray(both @ M.reshape(G, -1).T)


def estimated(moments: Moments, weights: Weights) -> tuple[float, float]:
    """The coefficient and its CR1 error in the data: the draw with every weight one."""
    world = world_of(moments, 0.0)
    b, error = ratios(moments, weights, world, np.ones((1, moments.groups)))
    return float(b[0]), float(error[0])


def p_value(
    moments: Moments,
    weights: Weights,
    null: float,
    draws: Iterable[Floats],
    *,
    enumerated: bool,
) -> float:
    """Share of draws with |t*| ≥ |t|, ties counted; (1 + number)/(1 + B) of random draws."""
    world = world_of(moments, null)
    gap, error = ratios(moments, weights, world, np.ones((1, moments.groups)))
    least = float(np.abs(gap[0]) / error[0]) * (1 - wild.TIES)
    hits, count = 0, 0
    for v in draws:
        gap, error = ratios(moments, weights, world, v)
        hits += int((np.abs(gap) >= least * error).sum())
        count += len(v)
    return hits / count if enumerated else (1 + hits) / (1 + count)


def inverted(
    moments: Moments, weights: Weights, draws: list[Floats], level: float
) -> ConfidenceSet:
    """The stretch of nulls around the estimate that are not rejected; an end may be infinite."""
    estimate, error = estimated(moments, weights)
    count = sum(len(v) for v in draws) + 1
    target = float((np.floor((1 - level) * count + 1e-9) + 0.5) / count)

    def end(side: float) -> float:
        def excess(distance: float) -> float:
            null = estimate + side * distance * error
            return p_value(moments, weights, null, draws, enumerated=False) - target

        inner, step = 0.0, 1.0
        while excess(inner + step) > 0:
            inner, step = inner + step, step * 1.5
            if inner > FARTHEST:
                return side * float("inf")
        distance = optimize.brentq(excess, inner, inner + step, xtol=FINENESS, rtol=1e-12)
        return estimate + side * float(distance) * error

    low, high = end(-1.0), end(1.0)
    method = f"inversion of the wild restricted efficient bootstrap test ({count - 1} draws)"
    if np.isinf(low) and np.isinf(high):
        return ConfidenceSet(Shape.LINE, float("nan"), float("nan"), level, method)
    return ConfidenceSet(Shape.INTERVAL, low, high, level, method)
