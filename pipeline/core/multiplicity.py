"""Many questions to the same deals: p-values that allow for how many were asked."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from pipeline.core.prices import Floats, Integers


@dataclass(frozen=True, slots=True, eq=False)
class Adjusted:
    """(S,) p-values: raw, Holm, Romano-Wolf, and Benjamini-Hochberg false-discovery q-values."""

    raw: Floats
    holm: Floats
    romano_wolf: Floats
    benjamini_hochberg: Floats


def holm(p: Floats) -> Floats:
    """(S,) step-down p-values that bound the chance of any false rejection (Holm 1979, SJS 6)."""
    order = np.argsort(p, kind="stable")
    stepped = np.maximum.accumulate(p[order] * np.arange(len(p), 0, -1))
    return _back(np.minimum(stepped, 1.0), order)


def benjamini_hochberg(p: Floats) -> Floats:
    """(S,) q-values that bound the expected share of false rejections.

    Benjamini and Hochberg (1995); for independent or positively dependent tests.
    """
    S = len(p)
    order = np.argsort(p, kind="stable")
    raw = p[order] * S / np.arange(1, S + 1)
    return _back(np.minimum(np.minimum.accumulate(raw[::-1])[::-1], 1.0), order)


def romano_wolf(statistics: Floats, resampled: Floats) -> Floats:
    """(S,) step-down p-values from the joint distribution of the statistics.

    ``statistics`` (S,) are t statistics, ``resampled`` (B, S) theirs under the null, all of one
    row from the same resample. p is (1 + #{max of those not yet passed ≥ |t|})/(B + 1), made
    monotone (Romano and Wolf 2016).
    """
    size = np.abs(statistics)
    order = np.argsort(-size, kind="stable")
    below = np.abs(resampled)[:, order]
    maxima = np.maximum.accumulate(below[:, ::-1], axis=1)[:, ::-1]
    beyond = (maxima >= size[order] * (1 - 1e-12)).sum(axis=0)
    return _back(np.maximum.accumulate((1 + beyond) / (len(resampled) + 1)), order)


def resampled_p(statistics: Floats, resampled: Floats) -> Floats:
    """(S,) two-sided p of each statistic by itself, (1 + #{|t*| ≥ |t|})/(B + 1).

    Shapes as in :func:`romano_wolf` (Davison and Hinkley 1997, sec. 4.2.5).
    """
    size = np.abs(statistics) * (1 - 1e-12)
    return np.asarray((1 + (np.abs(resampled) >= size).sum(axis=0)) / (len(resampled) + 1))


def adjusted(raw: Floats, statistics: Floats, resampled: Floats) -> Adjusted:
    """All adjustments of S tests side by side; shapes as in :func:`romano_wolf`."""
    return Adjusted(raw, holm(raw), romano_wolf(statistics, resampled), benjamini_hochberg(raw))


def _back(values: Floats, order: Integers) -> Floats:
    out = np.empty(len(values))
    out[order] = values
    return out
