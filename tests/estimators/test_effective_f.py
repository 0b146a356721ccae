"""Effective F and size-corrected t ratios: pieces against scipy, constants in tests/reference."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from pipeline.core.estimate import Shape
from pipeline.estimators import effective_f as strength


@pytest.mark.parametrize("df", [1.0, 1.37, 4.0, 12.5])
@pytest.mark.parametrize("noncentrality", [0.0, 0.8, 10.0, 240.0])
def test_noncentral_tail_against_scipy(df: float, noncentrality: float) -> None:
    # Reference: scipy.stats.ncx2 (Boost), whose survival function is good to about 1e-10.
    for x in (0.5, 5.0, df + noncentrality, 2 * (df + noncentrality) + 30):
        expected = stats.ncx2.sf(x, df, noncentrality) if noncentrality else stats.chi2.sf(x, df)
        found = strength.noncentral_chi2_tail(x, df, noncentrality)
        assert found == pytest.approx(expected, rel=1e-7, abs=1e-14)


@pytest.mark.parametrize(("L", "published"), [(2, 19.29), (3, 17.67), (5, 16.08)])
def test_critical_value_of_equal_instruments(L: int, published: float) -> None:
    # K_eff = L when all instruments count alike; values at 10% as computed from scipy's ncx2.
    W = 3.7 * np.eye(L)
    assert strength.effective_df(W, 10.0) == pytest.approx(L)
    assert strength.critical_value(W, 0.10) == pytest.approx(published, abs=0.006)
    expected = stats.ncx2.isf(0.05, L, 10.0 * L) / L
    assert strength.critical_value(W, 0.10) == pytest.approx(expected, rel=1e-8)


def test_one_dominant_instrument_counts_as_one() -> None:
    W = np.diag([1.0, 1e-9, 1e-9])
    assert strength.effective_df(W, 10.0) == pytest.approx(1.0, rel=1e-6)


def test_statistic_by_hand_for_one_instrument() -> None:
    # π = 2, V = .25, any Z: F = π²/V = 16, and the treatment is πz plus orthogonal noise.
    z = np.array([1.0, -1.0, 2.0, -2.0])
    D = 2 * z + np.array([1.0, 1.0, -1.0, -1.0])
    D -= z * (z @ D / (z @ z) - 2)
    result = strength.effective_f(D, z[:, None], np.array([2.0]), np.array([[0.25]]))
    assert result.statistic == pytest.approx(16.0)
    # scipy: P(ncx2(1, 10) > 16)
    assert result.p_value == pytest.approx(stats.ncx2.sf(16, 1, 10), rel=1e-8)


def test_critical_t_falls_to_the_normal_one() -> None:
    F = np.linspace(4.0, 104.66, 400)
    c = np.array([strength.size_corrected_critical(float(f)) for f in F])
    assert (np.diff(c) < 0).all()
    assert strength.size_corrected_critical(104.67) == pytest.approx(1.959964, abs=1e-6)
    assert c[-1] == pytest.approx(1.96, abs=1e-3)
    assert strength.size_corrected_critical(3.99) == np.inf


def test_between_grid_points_the_critical_value_errs_upwards() -> None:
    # c is convex in the root of F, so the chord lies above it.
    root, c = strength.ROOT_F_GRID, strength.CRITICAL_GRID
    assert (np.diff(c, 2) > -0.011).all(), "convex up to the table's rounding"
    middle = strength.size_corrected_critical(2.05**2)
    assert middle == pytest.approx((c[0] + c[1]) / 2)
    assert root[0] == 2.0


def test_size_corrected_sets() -> None:
    weak = strength.size_corrected_set(1.0, 0.5, 2.0, 2.0)
    assert weak.shape is Shape.LINE
    typical = strength.size_corrected_set(1.0, 0.5, 9.0, 2.0)
    assert (typical.low, typical.high) == pytest.approx((1 - 3.64 / 2, 1 + 3.64 / 2), abs=0.01)
    strong = strength.size_corrected_set(1.0, 0.5, 500.0, 2.3)
    assert strong.high - strong.low == pytest.approx(2.3)
