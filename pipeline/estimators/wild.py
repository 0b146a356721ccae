"""The wild cluster restricted bootstrap of one coefficient, on cluster scores.

A draw multiplies each cluster's restricted residuals by one weight and refits. Numerator and
cluster scores of the refitted t are linear in the G weights, so no draw ever touches the rows:
all of them together are one matrix product. Moving the null hypothesis moves both linearly too,
so the interval needs no further draw.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from scipy import optimize

from pipeline.core.design import Design
from pipeline.core.estimate import ConfidenceSet, Shape
from pipeline.core.prices import Floats, Integers
from pipeline.estimators.algebra import partial_out, refusal
from pipeline.estimators.covariance import cluster_factor, cluster_sums
from pipeline.estimators.few_clusters import Basis, basis_of
from pipeline.estimators.sample import Sample

CITATION = "Cameron, Gelbach and Miller (2008); MacKinnon, Nielsen and Webb (2023)"
DRAWS = 99_999
SEED = 20_260_301
FEW_FOR_SIGNS = 11
SIX_POINTS = np.array([-np.sqrt(1.5), -1.0, -np.sqrt(0.5), np.sqrt(0.5), 1.0, np.sqrt(1.5)])
"""Webb's weights, equally likely."""
TIES = 1e-9
VANISHING = 1e-10
BLOCK = 2048
FARTHEST = 2.0**40
UNIFORM_SEEN = 20
"""Clusters up to which a draw with one weight for all is likely enough to matter."""
SIGNS, WEBB = "signs", "webb"


@dataclass(frozen=True, slots=True)
class Bootstrapped:
    """What the bootstrap says of one coefficient.

    Attributes:
        statistic: t of the null that the coefficient is zero, CR1 errors.
        std_error: the CR1 error.
        p_value: two-sided and symmetric.
        set: the values that are not rejected.
        draws: weight vectors used.
        enumerated: whether they are all there are.
    """

    statistic: float
    std_error: float
    p_value: float
    set: ConfidenceSet
    draws: int
    enumerated: bool


@dataclass(frozen=True, slots=True, eq=False)
class World:
    """Restricted residuals as clusters see them: d_g'ũ_g (G,) and Q_g'ũ_g (G, p)."""

    own: Floats
    spread: Floats

    def at(self, delta: float, slope: World) -> World:
        """The world ``delta`` along ``slope``."""
        return World(self.own + delta * slope.own, self.spread + delta * slope.spread)


@dataclass(frozen=True, slots=True, eq=False)
class Scores:
    """The bootstrap world of the null β = b̂ - δ, linear in δ and in the weights v (G,).

    The refitted coefficient differs from the null by v'own; the cluster scores of its CR1
    variance are v∘own - ``cut`` (Σ_h v_h spread_h), own and spread those of ``fit`` + δ·``slope``.
    ``root`` is the square root of CR1's factor.
    """

    fit: World
    slope: World
    cut: Floats
    estimate: float
    std_error: float
    root: float

    def below(self, world: World) -> Floats:
        """(G, G) that turns weights, a row, into cluster scores."""
        return np.asarray(np.diag(world.own) - world.spread @ self.cut.T)


def scores_of(sample: Sample, basis: Basis, at: int) -> Scores:
    """The scores of coefficient ``at`` of a sample, effects taken out.

    With d = X(X'X)⁻¹c, a cluster's score is d_g'M(v∘ũ) = v_g d_g'ũ_g - (Q_g'd_g)'Σ_h v_h Q_h'ũ_h
    and ũ moves along M₋ⱼxⱼ as the null moves (MacKinnon, Nielsen and Webb 2023, sec. 5).

    Raises:
        InputProblem: ``cluster_decides`` if the CR1 error is zero.
    """
    d = basis.loads[:, at]
    both = np.column_stack([sample.y, sample.X[:, at]])
    y, x = partial_out(both, np.delete(sample.X, at, axis=1)).T
    estimate = float(d @ sample.y)

    def world(residual: Floats) -> World:
        own = cluster_sums((d * residual)[:, None], basis.codes)[:, 0]
        return World(own, cluster_sums(basis.Q * residual[:, None], basis.codes))

    fit = world(y - estimate * x)
    k = len(sample.names) + sample.counted
    root = float(np.sqrt(cluster_factor(sample.n, basis.groups, k)))
    cut = cluster_sums(basis.Q * d[:, None], basis.codes)
    size = float(np.linalg.norm(fit.own))
    if not size > VANISHING * float(np.linalg.norm(d * (y - estimate * x))):
        raise refusal(
            "cluster_decides",
            sample.names[at],
            f"the clusters' residuals say nothing about the coefficient of {sample.names[at]}",
            f"{sample.names[at]} that varies in several clusters",
            "cluster by a finer dimension, or do not read this coefficient",
        )
    return Scores(fit, world(x), cut, estimate, root * size, root)


def weight_blocks(
    groups: int, draws: int, kind: str, seed: int = SEED
) -> tuple[Iterable[Floats], bool]:
    """Weights (B, G) in blocks of rows, and whether they are all there are.

    All sign vectors when 2^G ≤ ``draws``, one of each pair v, -v, which give the same |t|; else
    ``draws`` random ones, the same for the same seed. Rademacher's signs, or Webb's six points.
    """
    if kind == SIGNS and 2**groups <= draws:
        count = np.arange(2 ** (groups - 1), dtype=np.int64)
        bits = (count[:, None] >> np.arange(groups, dtype=np.int64)) & 1
        signs = 1.0 - 2.0 * bits
        rows = np.asarray(signs, dtype=np.float64)
        return [rows[at : at + BLOCK] for at in range(0, len(rows), BLOCK)], True
    rng = np.random.default_rng(seed)
    sizes = [min(BLOCK, draws - at) for at in range(0, draws, BLOCK)]
    return (_random(rng, size, groups, kind) for size in sizes), False


def _random(rng: np.random.Generator, size: int, groups: int, kind: str) -> Floats:
    if kind == WEBB:
        return np.asarray(SIX_POINTS[rng.integers(0, 6, size=(size, groups), dtype=np.int8)])
    length = size * groups
    raw = np.frombuffer(rng.bytes((length + 7) // 8), dtype=np.uint8)
    signs = np.unpackbits(raw, count=length).reshape(size, groups).astype(np.float64)
    signs *= -2.0
    signs += 1.0
    return signs


@dataclass(frozen=True, slots=True, eq=False)
class Draws:
    """Of each draw (B,): the numerator and its slope in δ, and the variance as a quadratic in δ.

    The quadratics may be m rows (m, B), whose largest is the variance.
    """

    top: Floats
    top_slope: Floats
    constant: Floats
    linear: Floats
    square: Floats
    enumerated: bool

    def p_value(self, t: float, root: float, delta: float) -> float:
        """Share of draws with |t*| ≥ |t| in the world of β = b̂ - δ, ties counted.

        Of random draws (1 + number)/(1 + B): the data are one of them, and no p is zero.
        """
        top = self.top + delta * self.top_slope
        variance = self.constant + delta * (self.linear + delta * self.square)
        variance = variance.reshape(-1, len(top)).max(axis=0)
        hits = int((top * top >= (t * root) ** 2 * (1 - TIES) * variance).sum())
        return hits / len(top) if self.enumerated else (1 + hits) / (1 + len(top))


def draw(scores: Scores, blocks: Iterable[Floats], enumerated: bool) -> Draws:
    """All draws at once: products of weights and scores, block by block.

    A draw with one weight for all clusters gives the data back, whatever the null: |t*| = |t|
    exactly. Its slope is zero and is set so, or far nulls would see rounding instead.
    """
    G = len(scores.fit.own)
    tops = np.column_stack([scores.fit.own, scores.slope.own])
    belows = np.concatenate([scores.below(scores.fit), scores.below(scores.slope)], axis=1)
    parts: list[tuple[Floats, ...]] = []
    for weights in blocks:
        ends, made = weights @ tops, weights @ belows
        if G <= UNIFORM_SEEN:
            level = weights[:, :1]
            same = (weights == level).all(axis=1)
            ends[same] = level[same] * np.array([0.0, 1.0])
            made[same, :G], made[same, G:] = level[same] * scores.fit.own, 0.0
        here, slope = made[:, :G], made[:, G:]
        parts.append((*ends.T, _dot(here, here), 2 * _dot(here, slope), _dot(slope, slope)))
    return _gathered(parts, enumerated)


def draw_signs(scores: Scores, blocks: Iterable[Floats]) -> Draws:
    """As :func:`draw` for random signs, from 4p products a draw in place of 2G.

    With v² = 1 the sum of squares of v∘o - Cw, w = Σ_h v_h spread_h, is o'o - 2r'w + w'C'Cw with
    r = Σ_h v_h o_h C_h, whatever the number of clusters. It loses digits where it nearly
    vanishes, which the enumeration of few clusters could not bear.
    """
    fit, slope, cut = scores.fit, scores.slope, scores.cut
    p = cut.shape[1]
    columns = [fit.own[:, None], slope.own[:, None], fit.spread, slope.spread]
    columns += [cut * fit.own[:, None], cut * slope.own[:, None]]
    products = np.column_stack(columns).T
    inner = cut.T @ cut
    size = [float(a @ b) for a, b in ((fit.own, fit.own), (fit.own, slope.own))]
    size.append(float(slope.own @ slope.own))
    parts: list[tuple[Floats, ...]] = []
    for weights in blocks:
        made = products @ weights.T
        w, ws, r, rs = (made[2 + i * p : 2 + (i + 1) * p] for i in range(4))
        turned, moved = inner @ w, inner @ ws
        constant = size[0] + _down(turned - 2 * r, w)
        linear = 2 * (size[1] + _down(turned - r, ws) - _down(rs, w))
        square = size[2] + _down(moved - 2 * rs, ws)
        parts.append((made[0], made[1], constant, linear, square))
    return _gathered(parts, False)


def _at_null(scores: Scores, null: World, weights: Floats, low_rank: bool) -> tuple[Floats, Floats]:
    """Numerators and variances (B,) of the draws in one world alone."""
    if not low_rank:
        made = weights @ scores.below(null)
        return np.asarray(weights @ null.own), _dot(made, made)
    p = scores.cut.shape[1]
    columns = np.column_stack([null.own[:, None], null.spread, scores.cut * null.own[:, None]])
    turned = columns.T @ weights.T
    w, r = turned[1 : 1 + p], turned[1 + p :]
    variance = float(null.own @ null.own) + _down(scores.cut.T @ scores.cut @ w - 2 * r, w)
    return turned[0], variance


def _down(a: Floats, b: Floats) -> Floats:
    return np.asarray(np.einsum("ij,ij->j", a, b))


def _dot(a: Floats, b: Floats) -> Floats:
    return np.asarray(np.einsum("ij,ij->i", a, b))


def _gathered(parts: list[tuple[Floats, ...]], enumerated: bool) -> Draws:
    top, top_slope, constant, linear, square = (np.concatenate(p) for p in zip(*parts, strict=True))
    return Draws(top, top_slope, constant, linear, square, enumerated)


def _low_rank(scores: Scores, kind: str, enumerated: bool) -> bool:
    G, p = scores.cut.shape
    return kind == SIGNS and not enumerated and 2 * p < G


def bootstrap(
    sample: Sample,
    design: Design,
    codes: Integers,
    *,
    level: float = 0.95,
    draws: int = DRAWS,
    kind: str = SIGNS,
    seed: int = SEED,
) -> Bootstrapped:
    """Wild cluster restricted bootstrap of the treatment's coefficient, CR1 t.

    ``codes`` (n,) are one cluster dimension of the sample's rows; effects, absorbed in the
    sample, stay in every refit. Weights as in :func:`weight_blocks`. The set is the stretch of
    null values around the estimate that are not rejected at 1 - ``level``; an end is infinite
    when no value on that side is, as with 2^(1 - G) above 1 - ``level``.

    Source: Cameron, Gelbach and Miller (2008); Webb's weights; MacKinnon, Nielsen and Webb
    (2023). Same data and seed, same answer.

    Raises:
        InputProblem: as :func:`~pipeline.estimators.few_clusters.basis_of` and
            :func:`scores_of`.
    """
    basis = basis_of(sample, design, codes)
    scores = scores_of(sample, basis, sample.names.index(design.treatment))
    blocks, enumerated = weight_blocks(basis.groups, draws, kind, seed)
    low_rank = _low_rank(scores, kind, enumerated)
    drawn = draw_signs(scores, blocks) if low_rank else draw(scores, blocks, enumerated)
    return told(scores, drawn, level)


def told(scores: Scores, drawn: Draws, level: float) -> Bootstrapped:
    """What the draws say of zero and of every other value."""
    t = scores.estimate / scores.std_error
    return Bootstrapped(
        statistic=t,
        std_error=scores.std_error,
        p_value=drawn.p_value(t, scores.root, scores.estimate),
        set=_set(scores, drawn, level),
        draws=len(drawn.top) * (2 if drawn.enumerated else 1),
        enumerated=drawn.enumerated,
    )


def _set(scores: Scores, drawn: Draws, level: float) -> ConfidenceSet:
    low, high = (scores.estimate - _end(scores, drawn, 1 - level, side) for side in (1.0, -1.0))
    made = "all sign vectors" if drawn.enumerated else f"{len(drawn.top)} draws"
    method = f"inversion of the wild cluster bootstrap test ({made})"
    if np.isinf(low) and np.isinf(high):
        return ConfidenceSet(Shape.LINE, float("nan"), float("nan"), level, method)
    return ConfidenceSet(Shape.INTERVAL, low, high, level, method)


def p_value(
    sample: Sample,
    design: Design,
    codes: Integers,
    *,
    draws: int = DRAWS,
    kind: str = SIGNS,
    seed: int = SEED,
) -> float:
    """The p-value of :func:`bootstrap` alone, at half its cost."""
    basis = basis_of(sample, design, codes)
    scores = scores_of(sample, basis, sample.names.index(design.treatment))
    delta = scores.estimate
    null = scores.fit.at(delta, scores.slope)
    least = (delta / scores.std_error * scores.root) ** 2 * (1 - TIES)
    blocks, enumerated = weight_blocks(basis.groups, draws, kind, seed)
    low_rank = _low_rank(scores, kind, enumerated)
    hits, count = 0, 0
    for weights in blocks:
        top, variance = _at_null(scores, null, weights, low_rank)
        hits += int((top * top >= least * variance).sum())
        count += len(weights)
    return hits / count if enumerated else (1 + hits) / (1 + count)


def _end(scores: Scores, drawn: Draws, size: float, side: float) -> float:
    """The signed distance δ at which the null b̂ - δ is first rejected; infinite if never.

    p is one at the estimate and steps down from there; growing steps outward find the
    first rejection, and Brent's method the jump itself.
    """

    # Halfway between the largest share of hits that rejects and the next: none is equal to it.
    count = len(drawn.top) + (not drawn.enumerated)
    target = float((np.floor(size * count + 1e-9) + 0.5) / count)

    def excess(distance: float) -> float:
        t = distance / scores.std_error
        return drawn.p_value(t, scores.root, side * distance) - target

    inner, step = 0.0, 0.25 * scores.std_error
    while True:
        outer = inner + step
        if excess(outer) <= 0:
            break
        if outer > FARTHEST * scores.std_error:
            return side * float("inf")
        inner, step = outer, step * 1.2
    tolerance = 1e-9 * scores.std_error
    return side * float(optimize.brentq(excess, inner, outer, xtol=tolerance, rtol=1e-12))
