"""The joint distribution of many statistics of the same deals, drawn by signs on clusters."""

from __future__ import annotations

import numpy as np

from pipeline.core.prices import Floats, Integers
from pipeline.estimators.covariance import cluster_sums


def score_draws(influence: Floats, codes: Integers, draws: int, seed: int) -> Floats:
    """(draws, S) t statistics under the null from random signs on the clusters' influences.

    ``influence`` (n, S) holds what each row adds to each coefficient, best with the null imposed
    (zero where a row is not in the sample), ``codes`` (n,) the clusters; one sign a cluster serves
    all S at once (the score bootstrap of Kline and Santos 2012). Each draw is divided by its own
    standard error, √(G/(G - 1)·(Σψ² - S²/G)), as one t statistic of G cluster sums would be:
    with the error held fixed the tails are too thin for few clusters.
    """
    sums = cluster_sums(influence, codes)
    scale = np.sqrt(np.sum(sums**2, axis=0))
    unit = sums / np.where(scale > 0, scale, 1.0)
    groups = np.maximum((sums != 0).sum(axis=0), 2)
    rng = np.random.default_rng(seed)
    signs = rng.integers(0, 2, size=(draws, len(sums))) * 2.0 - 1.0
    total = signs @ unit
    spread = np.maximum(1 - total**2 / groups, 1e-12) * groups / (groups - 1)
    return np.asarray(total / np.sqrt(spread))
