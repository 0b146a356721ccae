"""Median and Huber columns against statsmodels, published values, and outliers."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import statsmodels.api as sm
from hypothesis import given, settings
from hypothesis import strategies as st

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import EstimationFailed
from pipeline.estimators.algebra import scaled
from pipeline.estimators.least_squares import ols
from pipeline.estimators.robust_location import huber, least_absolute, median
from tests.estimators.designs import deals, without

CLASSICAL = FitOptions(covariance="classical")


def of_table(y: np.ndarray, X: np.ndarray, names: tuple[str, ...]) -> Design:
    return Design(
        y=y.astype(float),
        X=np.column_stack([np.ones(len(y)), X]).astype(float),
        names=("constant", *names),
        treatment=names[0],
        rows=tuple(map(str, range(len(y)))),
        outcome="outcome",
    )


def heavy(seed: int, n: int = 150) -> Design:
    rng = np.random.default_rng(seed)
    X = rng.normal(size=(n, 2))
    y = 0.2 + X @ np.array([0.3, -0.1]) + rng.standard_t(2, size=n)
    return of_table(y, X, ("treatment", "control"))


# Source: Engel's food expenditure, printed by R's quantreg: 81.48225 and .56018 (from memory); the
# documentation of statsmodels' QuantReg, whose iteration stops early, prints 81.4823, .5602 and a
# pseudo R² of .6206.
def test_median_of_engel() -> None:
    table = sm.datasets.engel.load_pandas().data
    column = median(
        of_table(table.foodexp.to_numpy(), table[["income"]].to_numpy(), ("income",)), CLASSICAL
    )
    assert column.coefficients[0] == pytest.approx(81.48225, abs=5e-6)
    assert column.coefficients[1] == pytest.approx(0.56018, abs=5e-6)
    assert column.fit["pseudo_r_squared"] == pytest.approx(0.6206, abs=5e-5)


# Source: Brownlee's stack loss; statsmodels' documentation of RLM prints -41.0265, .8294, .9261,
# -.1278 for HuberT, R's MASS the same (from memory).
def test_huber_of_stack_loss() -> None:
    table = sm.datasets.stackloss.load_pandas()
    design = of_table(table.endog.to_numpy(), table.exog.to_numpy(), tuple(table.exog.columns))
    column = huber(design, CLASSICAL)
    np.testing.assert_allclose(
        column.coefficients, [-41.0265, 0.8294, 0.9261, -0.1278], rtol=0, atol=5e-5
    )
    fit = sm.RLM(design.y, design.X, M=sm.robust.norms.HuberT()).fit(tol=1e-13, maxiter=500)
    np.testing.assert_allclose(column.coefficients, fit.params, rtol=1e-8)
    np.testing.assert_allclose(column.std_errors, fit.bse, rtol=1e-7)
    assert column.fit["spread"] == pytest.approx(fit.scale, rel=1e-9)


@pytest.mark.parametrize("seed", [1, 2])
def test_huber_against_statsmodels(seed: int) -> None:
    design = heavy(seed)
    column = huber(design, CLASSICAL)
    fit = sm.RLM(design.y, design.X, M=sm.robust.norms.HuberT()).fit(tol=1e-13, maxiter=500)
    np.testing.assert_allclose(column.coefficients, fit.params, rtol=1e-8)
    np.testing.assert_allclose(column.std_errors, fit.bse, rtol=1e-7)


@pytest.mark.parametrize("seed", [1, 2])
def test_median_against_statsmodels(seed: int) -> None:
    """Theirs iterates weights to six digits, ours is the vertex: never a larger sum."""
    design = heavy(seed)
    column = median(design, CLASSICAL)
    fit = sm.QuantReg(design.y, design.X).fit(
        q=0.5, vcov="iid", kernel="epa", bandwidth="hsheather", max_iter=5000, p_tol=1e-10
    )
    ours, theirs = (
        np.abs(design.y - design.X @ b).sum() for b in (column.coefficients, fit.params)
    )
    assert ours <= theirs + 1e-12
    np.testing.assert_allclose(column.coefficients, fit.params, atol=1e-4)
    np.testing.assert_allclose(column.std_errors, fit.bse, rtol=1e-3)
    assert column.fit["bandwidth"] == pytest.approx(fit.bandwidth, rel=1e-3)


@settings(max_examples=25, deadline=None)
@given(seed=st.integers(0, 10_000), k=st.integers(1, 5))
def test_median_is_optimal_by_its_dual(seed: int, k: int) -> None:
    """A dual point inside the bounds with the same value proves the minimum."""
    rng = np.random.default_rng(seed)
    X = scaled(np.column_stack([np.ones(40), rng.normal(size=(40, k))]))[0]
    y = rng.standard_cauchy(size=40)
    b, e, a = least_absolute(X, y)
    assert np.abs(a).max() <= 1 + 1e-9
    np.testing.assert_allclose(X.T @ a, 0, atol=1e-12)
    assert np.abs(y - X @ b).sum() == pytest.approx(a @ y, rel=1e-9)
    assert (e == 0).sum() == k + 1


def test_median_with_a_constant_alone_is_the_median() -> None:
    rng = np.random.default_rng(3)
    y, group = rng.normal(size=41), np.arange(41) < 20
    y[group] += 1
    column = median(of_table(y, group.astype(float)[:, None], ("treatment",)), FitOptions())
    assert column.coefficients[0] == pytest.approx(np.median(y[~group]), abs=1e-12)
    # Twenty deals have no single median: every value between the middle two is one.
    low, high = np.sort(y[group])[9:11]
    assert low - 1e-12 <= column.coefficients.sum() <= high + 1e-12


@pytest.mark.parametrize("fit", [median, huber])
def test_one_wild_return_moves_little(fit: object) -> None:
    assert callable(fit)
    design = without(deals(), "effects")
    y = design.y.copy()
    y[3] += 1000.0
    wild = replace(design, y=y)
    moved = abs(fit(wild, FitOptions()).coefficients - fit(design, FitOptions()).coefficients)
    spread = fit(design, FitOptions()).std_errors
    assert (moved < spread).all()
    least = abs(ols(wild, FitOptions()).coefficients - ols(design, FitOptions()).coefficients)
    assert (least > 10 * moved).all()


@pytest.mark.parametrize("fit", [median, huber])
def test_an_exact_fit_is_withheld(fit: object) -> None:
    assert callable(fit)
    design = heavy(5)
    line = design.X @ np.array([0.2, 0.3, -0.1])
    with pytest.raises(EstimationFailed):
        fit(replace(design, y=line), FitOptions())
    mostly = line.copy()
    mostly[:40] += np.random.default_rng(1).normal(size=40)
    with pytest.raises(EstimationFailed, match="half of the deals"):
        fit(replace(design, y=mostly), FitOptions())


def test_huber_with_a_far_bend_is_least_squares() -> None:
    """Returns within reach of one another are all squares: the weights stay at one."""
    rng = np.random.default_rng(2)
    x = rng.normal(size=(80, 1))
    e = np.where(rng.random(80) < 0.5, 1.0, -1.0) * (1 + 0.1 * rng.random(80))
    design = of_table(0.5 * x[:, 0] + e, x, ("treatment",))
    column = huber(design, FitOptions(covariance="hc1"))
    assert column.fit["downweighted"] == 0
    np.testing.assert_allclose(
        column.std_errors, ols(design, FitOptions(covariance="hc1")).std_errors, rtol=1e-8
    )
