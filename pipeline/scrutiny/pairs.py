"""Treated and untreated deals alike in the controls, and how much hidden bias they can bear."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import optimize, special, stats

from pipeline.core.design import Design
from pipeline.core.prices import Floats, Integers
from pipeline.estimators.algebra import refusal, symmetric_root

CITATION = "Rosenbaum (2002)"
LARGEST_GAMMA = 1e6


@dataclass(frozen=True, slots=True, eq=False)
class Pairs:
    """(m,) rows of treated deals and, opposite, of the untreated they are compared with."""

    treated: Integers
    untreated: Integers
    distance: Floats


def matched_pairs(design: Design) -> Pairs:
    """Each deal of the smaller group with another one of the larger, distances least in sum.

    Distance is Mahalanobis's on the ranks of the varying controls, which no outlier stretches
    (Rosenbaum 2010, ch. 8); the assignment is optimal. Both groups keep all or the nearest deals,
    so the pairs speak of the smaller group.

    Raises:
        InputProblem: ``treatment_not_binary``; ``few_rows`` for fewer than five pairs.
    """
    D = design.X[:, design.names.index(design.treatment)]
    if set(np.unique(D).tolist()) != {0.0, 1.0}:
        raise refusal(
            "treatment_not_binary",
            design.treatment,
            "values other than 0 and 1",
            "a feature a deal has or has not",
            "ask for another check of hidden bias",
        )
    one, none = np.flatnonzero(D == 1), np.flatnonzero(D == 0)
    if min(len(one), len(none)) < 5:
        raise refusal(
            "few_rows",
            design.treatment,
            f"{len(one)} treated and {len(none)} untreated deals",
            "five of either",
            "widen the sample",
        )
    gaps = _distances(design, one, none)
    i, j = optimize.linear_sum_assignment(gaps)
    return Pairs(one[i], none[j], gaps[i, j])


def _distances(design: Design, one: Integers, none: Integers) -> Floats:
    """(treated, untreated) Mahalanobis distances on the ranks of the varying controls."""
    varies = (np.ptp(design.X, axis=0) > 0) & (np.array(design.names) != design.treatment)
    if not varies.any():
        return np.zeros((len(one), len(none)))
    ranks = stats.rankdata(design.X[:, varies], axis=0)
    inverse = np.linalg.pinv(np.atleast_2d(np.cov(ranks.T)), hermitian=True)
    turned = ranks @ symmetric_root(inverse)
    a, b = turned[one], turned[none]
    squares = np.sum(a**2, axis=1)[:, None] + np.sum(b**2, axis=1) - 2 * a @ b.T
    return np.asarray(np.sqrt(np.maximum(squares, 0.0)), dtype=np.float64)


def signed_rank_bounds(differences: Floats, gamma: float) -> tuple[float, float]:
    """One-sided p that the pairs' ``differences`` (m,) tend upward, smallest and largest.

    If hidden factors make one deal of a pair up to ``gamma`` times as likely to be treated as the
    other, the signed-rank statistic lies between sums with success probabilities 1/(1 + Γ) and
    Γ/(1 + Γ); normal approximation without continuity correction, mean ranks for ties, and zero
    differences ranked with the others but counted as zero (Rosenbaum 2002, sec. 4.3).

    Raises:
        ValueError: if ``gamma`` is below 1 or every difference is zero.
    """
    if gamma < 1 or not differences.any():
        raise ValueError("gamma must be at least 1, and some difference other than zero")
    ranks = np.where(differences == 0, 0.0, stats.rankdata(np.abs(differences)))
    T = float(ranks[differences > 0].sum())
    total, squares = float(ranks.sum()), float(ranks @ ranks)
    found = []
    for p in (1 / (1 + gamma), gamma / (1 + gamma)):
        found.append(float(special.ndtr(-(T - p * total) / np.sqrt(p * (1 - p) * squares))))
    return found[0], found[1]


def breakdown_gamma(differences: Floats, level: float = 0.95) -> float:
    """Smallest Γ at which the effect is no longer significant, both sides counted; 1 if it is not.

    The direction is that of the differences; twice the largest one-sided p is held against
    1 - ``level``. Infinite beyond 10⁶.
    """
    up, down = signed_rank_bounds(differences, 1.0)[1], signed_rank_bounds(-differences, 1.0)[1]
    d = differences if up <= down else -differences

    def margin(log_gamma: float) -> float:
        return 2 * signed_rank_bounds(d, float(np.exp(log_gamma)))[1] - (1 - level)

    if margin(0.0) > 0:
        return 1.0
    if margin(float(np.log(LARGEST_GAMMA))) <= 0:
        return float("inf")
    return float(np.exp(optimize.brentq(margin, 0.0, np.log(LARGEST_GAMMA), xtol=1e-12)))
