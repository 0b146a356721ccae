"""The fast ranks against scipy's, with ties, gaps and values that differ in their last bits."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from pipeline.core.prices import Floats
from pipeline.significance.ranks import ROWS, mean_rank, rolling_sums


def by_scipy(returns: Floats) -> tuple[Floats, Floats]:
    """Mean centred rank of each day and its share of deals, by ``scipy.stats.rankdata``."""
    known = np.isfinite(returns)
    ranks = stats.rankdata(returns, axis=1, nan_policy="omit")
    centred = ranks / (known.sum(axis=1, keepdims=True) + 1) - 0.5
    return np.nanmean(centred, axis=0), known.mean(axis=0)


def cases() -> dict[str, Floats]:
    stream = np.random.default_rng(4)
    plain = stream.normal(0, 0.02, (2 * ROWS + 7, 90))
    gappy = plain.copy()
    gappy[stream.random(plain.shape) < 0.1] = np.nan
    gappy[3] = -np.nan  # no return at all, and the other sign of nothing
    gappy[3, :2] = [0.01, -0.01]
    tied = np.round(gappy, 2)
    close = plain.copy()
    close[:, 5] = close[:, 6] * (1 + 2e-16)
    close[::2, 7] = close[::2, 8] * (1 - 1e-14)
    zeros = plain.copy()
    zeros[:, 10], zeros[:, 11], zeros[:, 12], zeros[:, 13] = 0.0, -0.0, 5e-324, -5e-324
    return {
        "plain": plain,
        "gaps": gappy,
        "ties": tied,
        "last bits": close,
        "zeros": zeros,
        "all below zero": -np.abs(plain),
        "one day": plain[:4, :1],
        "power of two": plain[:, :64],
    }


@pytest.mark.parametrize("name", list(cases()))
def test_mean_ranks_are_scipys(name: str) -> None:
    returns = cases()[name]
    known = by_scipy(returns)
    for found, wanted in zip(mean_rank(returns), known, strict=True):
        np.testing.assert_allclose(found, wanted, atol=1e-13)
    split = returns.shape[1] // 2
    for found, wanted in zip(mean_rank(returns[:, :split], returns[:, split:]), known, strict=True):
        np.testing.assert_allclose(found, wanted, atol=1e-13)


def test_a_day_without_a_return_has_no_mean_rank() -> None:
    returns = np.array([[0.1, np.nan, 0.2], [0.3, np.nan, -0.1]])
    mean, share = mean_rank(returns)
    np.testing.assert_allclose(mean, [0.0, np.nan, 0.0], atol=1e-15)
    np.testing.assert_array_equal(share, [1.0, 0.0, 1.0])


@pytest.mark.parametrize("length", [1, 2, 5, 20])
def test_rolling_sums_are_sums_of_neighbours(length: int) -> None:
    returns = np.random.default_rng(2).normal(size=(3, 20))
    returns[1, 4] = np.nan
    wanted = [[row[at : at + length].sum() for at in range(20 - length + 1)] for row in returns]
    np.testing.assert_allclose(rolling_sums(returns, length), wanted, atol=1e-14)
