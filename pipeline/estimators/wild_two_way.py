"""The wild cluster restricted bootstrap of a t with two-way clustered errors.

Weights go by the dimension with fewer clusters, as MacKinnon, Nielsen and Webb (2021) advise; the
errors of every refit allow for both. All scores remain linear in the weights and in the null.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace

import numpy as np

from pipeline.core.design import Design
from pipeline.core.prices import Booleans, Floats, Integers
from pipeline.estimators import wild
from pipeline.estimators.algebra import partial_out
from pipeline.estimators.covariance import (
    cluster_factor,
    cluster_sums,
    groups_of,
    intersection,
    recoded,
)
from pipeline.estimators.few_clusters import basis_of
from pipeline.estimators.sample import Sample

CITATION = "MacKinnon, Nielsen and Webb (2021, 2024)"


@dataclass(frozen=True, slots=True, eq=False)
class Across:
    """Residuals times loads, by the G clusters that weights go by and those of another grouping.

    Attributes:
        own: (G, H) Σ d_i ũ_i of the rows in both clusters.
        cut: (H, p) Σ d_i Q_i.
        factor: CR1's factor of the H clusters.
    """

    own: Floats
    slope: Floats
    cut: Floats
    factor: float


@dataclass(frozen=True, slots=True, eq=False)
class Inside:
    """What the intersections, each in one cluster, add up to there.

    Attributes:
        squares: (3, G) sums over a cluster's intersections of own², own·slope and slope².
        turned: (2, G, p) sums of own·cut and of slope·cut.
        inner: (p, p) Σ cut cut' over all intersections.
        factor: CR1's factor of the intersections.
    """

    squares: Floats
    turned: Floats
    inner: Floats
    factor: float


def bootstrap(
    sample: Sample,
    design: Design,
    first: Integers,
    second: Integers,
    *,
    level: float = 0.95,
    draws: int = wild.DRAWS,
    kind: str = wild.SIGNS,
    seed: int = wild.SEED,
) -> wild.Bootstrapped:
    """As :func:`~pipeline.estimators.wild.bootstrap` for two cluster dimensions (n,), (n,).

    The squared error, of the data and of each draw, is the largest of V₁ + V₂ - V₁₂, V₁ and V₂,
    each with its own G/(G - 1): the sum alone may be negative (MacKinnon, Nielsen and Webb 2024).
    With few clusters in both dimensions it comes nearer to its level than t and may still miss it.

    Raises:
        InputProblem: as :func:`~pipeline.estimators.wild.bootstrap`.
    """
    few, many = sorted((first, second), key=groups_of)
    basis, at = basis_of(sample, design, few), sample.names.index(design.treatment)
    scores = wild.scores_of(sample, basis, at)
    d = basis.loads[:, at]
    both = np.column_stack([sample.y, sample.X[:, at]])
    y, x = partial_out(both, np.delete(sample.X, at, axis=1)).T
    rows = np.column_stack([d * (y - scores.estimate * x), d * x])
    k = len(sample.names) + sample.counted
    other = _across(rows, basis.Q * d[:, None], basis.codes, recoded(many), k)
    inside = _inside(rows, basis.Q * d[:, None], basis.codes, intersection(few, many), k)
    blocks, enumerated = wild.weight_blocks(basis.groups, draws, kind, seed)
    drawn = _drawn(scores, other, inside, blocks, enumerated)
    data = _drawn(scores, other, inside, [np.ones((1, basis.groups))], False)
    error = float(np.sqrt(data.constant.max()))
    return wild.told(replace(scores, std_error=error, root=1.0), drawn, level)


def _across(rows: Floats, cut: Floats, few: Integers, many: Integers, k: int) -> Across:
    G, H = int(few.max()) + 1, int(many.max()) + 1
    place = few * H + many
    sums = [np.bincount(place, weights=row, minlength=G * H).reshape(G, H) for row in rows.T]
    own, slope = (np.asarray(one, dtype=np.float64) for one in sums)
    return Across(own, slope, cluster_sums(cut, many), cluster_factor(len(rows), H, k))


def _inside(rows: Floats, cut: Floats, few: Integers, pairs: Integers, k: int) -> Inside:
    sums, cuts = cluster_sums(rows, pairs), cluster_sums(cut, pairs)
    where = np.zeros(len(sums), dtype=np.int64)
    where[recoded(pairs)] = few
    products = np.column_stack([sums[:, 0] ** 2, sums[:, 0] * sums[:, 1], sums[:, 1] ** 2])
    return Inside(
        cluster_sums(products, where).T,
        np.array([cluster_sums(cuts * one[:, None], where) for one in sums.T]),
        cuts.T @ cuts,
        cluster_factor(len(rows), len(sums), k),
    )


def _drawn(
    scores: wild.Scores,
    other: Across,
    inside: Inside,
    blocks: Iterable[Floats],
    enumerated: bool,
) -> wild.Draws:
    """Numerators, and the three variances as quadratics in the null: (3, B) each."""
    fit, slope = scores.fit, scores.slope
    worlds = ((fit, other.own), (slope, other.slope))
    first = np.concatenate([scores.below(world) for world, _ in worlds], axis=1)
    second = np.concatenate([own - w.spread @ other.cut.T for w, own in worlds], axis=1)
    ends: list[Floats] = []
    variances: list[Floats] = []
    for v in blocks:
        # One weight for all gives the data back, whatever the null: no slope but its own.
        level = np.where((v == v[:, :1]).all(axis=1), v[:, 0], 0.0)
        same = level != 0
        top, moved = v @ fit.own, v @ slope.own
        top[same], moved[same] = 0.0, level[same]
        one = scores.root**2 * _squares(v @ first, same, level, fit.own)
        two = other.factor * _squares(v @ second, same, level, other.own.sum(axis=0))
        both = inside.factor * _intersections(v, fit, slope, inside, same)
        ends.append(np.array([top, moved]))
        variances.append(np.array([one + two - both, one, two]))
    constant, linear, square = np.concatenate(variances, axis=2).swapaxes(0, 1)
    top, moved = np.concatenate(ends, axis=1)
    return wild.Draws(top, moved, constant, linear, square, enumerated)


def _squares(made: Floats, same: Booleans, level: Floats, data: Floats) -> Floats:
    """(3, B) of the scores here + δ·there, side by side in ``made``: δ⁰, δ¹ and δ²."""
    half = made.shape[1] // 2
    here, there = made[:, :half], made[:, half:]
    here[same], there[same] = level[same, None] * data, 0.0
    return np.array(
        [
            np.einsum("bh,bh->b", here, here),
            2 * np.einsum("bh,bh->b", here, there),
            np.einsum("bh,bh->b", there, there),
        ]
    )


def _intersections(
    v: Floats, fit: wild.World, slope: wild.World, inside: Inside, same: Booleans
) -> Floats:
    """(3, B) of Σ over intersections of (v own - cut'w)², w = Σ v spread: δ⁰, δ¹ and δ²."""
    w, ws = v @ fit.spread, v @ slope.spread
    r, rs = v @ inside.turned[0], v @ inside.turned[1]
    zero, one, two = inside.squares @ (v * v).T
    wi, wsi = w @ inside.inner, ws @ inside.inner
    found = np.array(
        [
            zero + np.einsum("bp,bp->b", wi - 2 * r, w),
            2 * (one + np.einsum("bp,bp->b", wi - r, ws) - np.einsum("bp,bp->b", rs, w)),
            two + np.einsum("bp,bp->b", wsi - 2 * rs, ws),
        ]
    )
    found[1:, same] = 0.0
    return found
