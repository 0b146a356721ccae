"""The plain mean of an outcome and how sure it is, deals of one cluster moving together or not."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from pipeline.core.estimate import t_reach
from pipeline.core.prices import Floats, Integers
from pipeline.estimators.covariance import cluster_covariance, groups_of, hc1


@dataclass(frozen=True, slots=True)
class Average:
    """A mean with its error and interval, NaN where the deals or clusters are too few for one.

    ``clusters`` is 0 where deals are taken as independent.
    """

    mean: float
    std_error: float
    df: float
    low: float
    high: float
    clusters: int = 0


def average(values: Floats, codes: Integers | None, level: float) -> Average:
    """Mean of ``values`` (n,) with its t interval at ``level``, in the values' unit.

    The error is s/√n with n - 1 degrees of freedom; with clusters ``codes`` (n,) it is CR1, the
    root of G/(G-1) Σ_g (Σ_{i in g} (y_i - ȳ)/n)², with G - 1 (Liang and Zeger 1986; Cameron and
    Miller 2015).
    """
    n, mean = len(values), float(values.mean())
    influence = (values - mean)[:, None] / n
    groups = n if codes is None else groups_of(codes)
    if groups < 2:
        nan = float("nan")
        return Average(mean, nan, nan, nan, nan, 0 if codes is None else groups)
    covariance = hc1(influence, 1) if codes is None else cluster_covariance(influence, codes, 1)
    error = float(np.sqrt(covariance[0, 0]))
    half = t_reach(level, groups - 1) * error
    return Average(
        mean, error, groups - 1.0, mean - half, mean + half, 0 if codes is None else groups
    )
