"""Covariances of coefficients as sums over the influence of single rows.

Everywhere ``influence`` is (n, k): row i holds (X'X)⁻¹ x_i e_i, what the row adds to the
coefficients. Any estimator with such rows (least squares, two stages, probit) uses these
functions. No function looks at a distribution: the degrees of freedom are the caller's.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from pipeline.core.prices import Floats, Integers

LONG_ERVIN = "Long and Ervin (2000)"
CAMERON_GELBACH_MILLER = "Cameron, Gelbach and Miller (2011)"


def hc0(influence: Floats) -> Floats:
    """(k, k) Σ ψψ' (White 1980)."""
    return np.asarray(influence.T @ influence)


def hc1(influence: Floats, k: int) -> Floats:
    """(k, k) n/(n-k) times HC0; ``k`` counts every coefficient, absorbed ones too.

    Hinkley (1977), named HC1 by MacKinnon and White (1985).
    """
    n = len(influence)
    return np.asarray(n / (n - k) * hc0(influence))


def hc2(influence: Floats, leverage: Floats) -> Floats:
    """(k, k) Σ ψψ'/(1-h), h (n,) the leverages (MacKinnon and White 1985)."""
    return hc0(influence / np.sqrt(1 - leverage)[:, None])


def hc3(influence: Floats, leverage: Floats) -> Floats:
    """(k, k) Σ ψψ'/(1-h)² (Davidson and MacKinnon 1993; advised by Long and Ervin 2000)."""
    return hc0(influence / (1 - leverage)[:, None])


def recoded(codes: Integers) -> Integers:
    """(n,) the same groups, numbered from 0 without gaps."""
    top = int(codes.max(initial=0))
    if codes.min(initial=0) >= 0 and top < 32 * len(codes) + 1024:
        # Counting is linear in n; sorting, which np.unique does, is not.
        taken = np.bincount(codes) > 0
        if taken.all():
            return np.asarray(codes, dtype=np.int64)
        return np.asarray((np.cumsum(taken) - 1)[codes], dtype=np.int64)
    return np.asarray(np.unique(codes, return_inverse=True)[1].reshape(-1), dtype=np.int64)


def groups_of(codes: Integers) -> int:
    """How many groups ``codes`` (n,) names."""
    return int(recoded(codes).max()) + 1


def cluster_sums(rows: Floats, codes: Integers) -> Floats:
    """(G, k) sums of ``rows`` (n, k) within the clusters of ``codes`` (n,)."""
    at = recoded(codes)
    return np.column_stack([np.bincount(at, weights=column) for column in rows.T])


def cluster_factor(n: int, groups: int, k: int) -> float:
    """G/(G-1) · (n-1)/(n-k), the factor that makes CR0 into CR1."""
    return groups / (groups - 1) * (n - 1) / (n - k)


def cluster_covariance(influence: Floats, codes: Integers, k: int) -> Floats:
    """(k, k) CR1: the factor G/(G-1)·(n-1)/(n-k) times Σ_g ψ_g ψ_g' (Liang and Zeger 1986).

    ``codes`` (n,) names the cluster of each row; ``k`` counts the coefficients, without fixed
    effects that are nested in the clusters. Not to be read against the normal: use t(G-1)
    (Cameron and Miller 2015).
    """
    sums = cluster_sums(influence, codes)
    return np.asarray(cluster_factor(len(influence), len(sums), k) * (sums.T @ sums))


def intersection(first: Integers, second: Integers) -> Integers:
    """(n,) codes of the pairs of two cluster dimensions."""
    a, b = recoded(first), recoded(second)
    return recoded(a * (int(b.max()) + 1) + b)


@dataclass(frozen=True, slots=True, eq=False)
class TwoWay:
    """A two-way covariance (k, k) and whether negative eigenvalues were set to zero."""

    covariance: Floats
    floored: bool


def two_way_covariance(
    influence: Floats, first: Integers, second: Integers, k: int, *, unit_free: bool = True
) -> TwoWay:
    """V₁ + V₂ - V₁₂, each part with its own G/(G-1) (Cameron, Gelbach and Miller 2011, eq. 2.11).

    The sum need not be positive semi-definite; its negative eigenvalues are set to zero, as
    the authors propose. Eigenvalues depend on the units of the regressors: unless the caller has
    brought the columns to units of their own (``unit_free`` false), they are those of the matrix
    scaled to a unit diagonal. Read against t(min(G₁, G₂) - 1).
    """
    total = (
        cluster_covariance(influence, first, k)
        + cluster_covariance(influence, second, k)
        - cluster_covariance(influence, intersection(first, second), k)
    )
    scale = np.ones(len(total))
    if unit_free:
        scale = np.sqrt(np.maximum(np.abs(np.diag(total)), 1e-300))
    values, vectors = np.linalg.eigh(total / np.outer(scale, scale))
    if values[0] >= -1e-12 * max(float(values[-1]), 0.0):
        return TwoWay(total, False)
    repaired = vectors * np.maximum(values, 0.0) @ vectors.T
    return TwoWay(np.asarray(repaired * np.outer(scale, scale)), True)
