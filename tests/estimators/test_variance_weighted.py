"""Known-variance weights: their limits, the formula, and that they are worth having."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import statsmodels.api as sm
from hypothesis import given, settings
from hypothesis import strategies as st

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import EstimationFailed
from pipeline.core.findings import InputProblem
from pipeline.estimators.least_squares import ols
from pipeline.estimators.variance_weighted import variance_weighted
from tests.estimators.designs import deals, measured, one_cluster_dimension, without


def returns(seed: int, own: float, n: int = 120) -> Design:
    """Deals with own standard deviation ``own`` and very uneven measurement errors."""
    rng = np.random.default_rng(seed)
    omega = rng.uniform(0.1, 3.0, size=n) ** 2
    X = np.column_stack([np.ones(n), rng.normal(size=n), rng.normal(size=n)])
    y = X @ np.array([0.5, 0.3, -0.2]) + own * rng.normal(size=n)
    return Design(
        y=y + np.sqrt(omega) * rng.normal(size=n),
        X=X,
        names=("constant", "treatment", "control"),
        treatment="treatment",
        rows=tuple(map(str, range(n))),
        outcome="CAR",
        outcome_variance=omega,
    )


# Limit: no measurement error is least squares, whatever the covariance.
@pytest.mark.parametrize("kind", ["classical", "hc0", "hc1", "hc2", "hc3", "auto"])
def test_no_measurement_error_is_least_squares(kind: str) -> None:
    design = replace(returns(1, 1.0), outcome_variance=np.zeros(120))
    options = FitOptions(covariance=kind)
    one, two = variance_weighted(design, options), ols(design, options)
    np.testing.assert_allclose(one.coefficients, two.coefficients, rtol=1e-12)
    np.testing.assert_allclose(one.covariance, two.covariance, rtol=1e-10)
    assert one.fit["noise_share"] == 0


# Limit: nothing but measurement error is weighting by 1/ω, with statsmodels' WLS and its HC3.
def test_measurement_error_alone_is_weighted_least_squares() -> None:
    design = returns(2, 0.0)
    assert design.outcome_variance is not None
    design = replace(design, outcome_variance=1.3 * design.outcome_variance)
    assert design.outcome_variance is not None
    column = variance_weighted(design, FitOptions())
    fit = sm.WLS(design.y, design.X, weights=1 / design.outcome_variance).fit(cov_type="HC3")
    assert column.fit["own_std_dev"] == 0
    assert any("set to zero" in note for note in column.notes)
    np.testing.assert_allclose(column.coefficients, fit.params, rtol=1e-9)
    np.testing.assert_allclose(column.std_errors, fit.bse, rtol=1e-9)


@settings(max_examples=15, deadline=None)
@given(seed=st.integers(0, 10_000))
def test_weights_are_the_formula(seed: int) -> None:
    """Hanushek (1974), written out with n×n matrices, then weighted by statsmodels."""
    design = returns(seed, 2.0)
    omega, X = design.outcome_variance, design.X
    assert omega is not None
    e = design.y - X @ np.linalg.lstsq(X, design.y)[0]
    bread = np.linalg.inv(X.T @ X)
    trace = np.trace(bread @ X.T @ np.diag(omega) @ X)
    own = max((e @ e - omega.sum() + trace) / (len(e) - 3), 0.0)
    fit = sm.WLS(design.y, X, weights=1 / (omega + own)).fit(cov_type="HC1", use_t=True)
    column = variance_weighted(design, FitOptions(covariance="hc1"))
    assert column.fit["own_std_dev"] == pytest.approx(np.sqrt(own), rel=1e-10)
    np.testing.assert_allclose(column.coefficients, fit.params, rtol=1e-9)
    np.testing.assert_allclose(column.std_errors, fit.bse, rtol=1e-9)
    np.testing.assert_allclose(column.p_values, fit.pvalues, rtol=1e-7)
    assert column.fit["r_squared"] == pytest.approx(fit.rsquared, rel=1e-9)


def test_own_variance_is_unbiased_and_the_estimate_is_tighter() -> None:
    """Over 400 samples σ̂_u² averages the truth, and the weights beat least squares."""
    made = [variance_weighted(returns(seed, 1.0), FitOptions()) for seed in range(400)]
    own = np.array([column.fit["own_std_dev"] ** 2 for column in made])
    assert (own > 0).mean() > 0.9
    assert abs(own.mean() - 1.0) < 4 * own.std() / 20 + 0.02, "the floor at zero adds a little"
    ours = np.array([column.term("treatment")["coefficient"] for column in made])
    least = np.array([column.fit["least_squares"] for column in made])
    assert abs(ours.mean() - 0.3) < 4 * ours.std() / 20
    assert ours.std() < 0.85 * least.std()


def test_clusters_and_few_clusters() -> None:
    design = measured(one_cluster_dimension(without(deals(), "effects")))
    assert design.outcome_variance is not None
    for options in (FitOptions(cluster=True), FitOptions(covariance="cr2")):
        column = variance_weighted(design, options)
        own = column.fit["own_std_dev"] ** 2
        root = 1 / np.sqrt(design.outcome_variance + own)
        weighed = replace(design, y=root * design.y, X=root[:, None] * design.X)
        by_hand = ols(weighed, options)
        np.testing.assert_allclose(column.coefficients, by_hand.coefficients, rtol=1e-9)
        np.testing.assert_allclose(column.std_errors, by_hand.std_errors, rtol=1e-9)
        assert column.df == pytest.approx(by_hand.df)


def test_no_variance_is_refused() -> None:
    with pytest.raises(InputProblem) as caught:
        variance_weighted(deals(), FitOptions())
    assert caught.value.findings[0].rule == "no_outcome_variance"


def test_an_infinite_weight_is_withheld() -> None:
    design = returns(3, 0.0)
    assert design.outcome_variance is not None
    omega = 5 * design.outcome_variance
    omega[0] = 0.0
    with pytest.raises(EstimationFailed, match="infinite"):
        variance_weighted(replace(design, outcome_variance=omega), FitOptions())


@pytest.mark.parametrize("bad", [np.ones(3), np.full(120, -1.0), np.full(120, np.nan)])
def test_a_design_refuses_variances_that_are_none(bad: np.ndarray) -> None:
    with pytest.raises(ValueError, match="outcome_variance"):
        replace(returns(4, 1.0), outcome_variance=bad)
