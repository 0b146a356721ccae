"""The joint likelihood: derivatives, scores, peaks, and the refusals at the edge."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from pipeline.core.design import FitOptions
from pipeline.core.estimate import EstimationFailed
from pipeline.estimators import likelihood_maximum
from pipeline.estimators.joint_normal import Joint, derivatives, scores
from pipeline.estimators.likelihood_maximum import maximise
from pipeline.estimators.selection_ml import heckman_likelihood
from tests.estimators.designs import deals


def rows(seed: int, *, all_seen: bool, n: int = 80) -> Joint:
    rng = np.random.default_rng(seed)
    W = np.column_stack([np.ones(n), rng.normal(size=(n, 2))])
    signs = np.where(W[:, 1] + rng.normal(size=n) > 0, 1.0, -1.0)
    at = np.arange(n) if all_seen else np.flatnonzero(signs > 0)
    X = np.column_stack([np.ones(len(at)), rng.normal(size=len(at))])
    return Joint(signs, W, at, X[:, 1] + rng.normal(size=len(at)), X)


@settings(max_examples=20, deadline=None, derandomize=True)
@given(st.integers(0, 2**32 - 1), st.booleans(), st.floats(-2.5, 2.5))
def test_derivatives_are_those_of_the_value(seed: int, all_seen: bool, t: float) -> None:
    model = rows(seed, all_seen=all_seen)
    theta = np.append(np.random.default_rng(seed).normal(size=model.size - 1) * 0.5, t)
    here = derivatives(model, theta)
    np.testing.assert_allclose(
        scores(model, theta).sum(axis=0), here.gradient, rtol=1e-9, atol=1e-9
    )
    step = 1e-5
    for at in range(model.size):
        ahead, behind = theta.copy(), theta.copy()
        ahead[at] += step
        behind[at] -= step
        one, other = derivatives(model, ahead), derivatives(model, behind)
        size = 1 + abs(here.gradient[at])
        assert (one.value - other.value) / (2 * step) == pytest.approx(
            here.gradient[at], abs=1e-4 * size
        )
        numeric = (one.gradient - other.gradient) / (2 * step)
        scale = 1 + np.abs(here.hessian[at])
        assert (np.abs(numeric - here.hessian[at]) < 1e-4 * scale).all()


def test_value_is_the_density_of_the_pair() -> None:
    """Source: scipy's bivariate normal, integrated over the choice by its conditional."""
    model = rows(3, all_seen=True)
    theta = np.array([0.1, 0.6, -0.3, 0.2, 0.9, np.log(1.3), np.arctanh(-0.55)])
    e = (model.y - model.X @ theta[3:5]) / 1.3
    index = model.W @ theta[:3]
    total = 0.0
    for q, one, a in zip(model.signs, e, index, strict=True):
        # P(v > -a | ε) with v given e normal of mean ρe and variance 1 - ρ².
        tail = stats.norm.sf(-a, -0.55 * one, np.sqrt(1 - 0.55**2))
        total += np.log(tail if q > 0 else 1 - tail) + stats.norm.logpdf(one) - np.log(1.3)
    assert derivatives(model, theta).value == pytest.approx(total, rel=1e-12)


def test_without_correlation_the_equations_part() -> None:
    column = heckman_likelihood(deals(), FitOptions())
    independent = column.fit["log_likelihood_independent"]
    assert column.fit["profile.0"] == pytest.approx(
        independent - column.fit["log_likelihood"], abs=1e-9
    )
    assert column.fit["starts_agreeing"] >= 1
    assert column.fit["gradient"] < 1e-7


def test_an_edge_is_no_estimate() -> None:
    """Outcome's error equal to the choice's: the likelihood rises without end towards ρ = 1."""
    rng = np.random.default_rng(2)
    n = 300
    w, v = rng.normal(size=(2, n))
    signs = np.where(w + v > 0, 1.0, -1.0)
    W = np.column_stack([np.ones(n), w])
    model = Joint(
        signs, W, np.arange(n), v.copy(), np.column_stack([np.ones(n), rng.normal(size=n)])
    )
    with pytest.raises(EstimationFailed, match="keeps rising as the correlation"):
        maximise(model, np.array([0.0, 1.0]), (np.zeros(2), 1.0, 0.9))


def test_no_convergence_is_no_estimate(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(likelihood_maximum, "MOST_STEPS", 1)
    with pytest.raises(EstimationFailed, match="did not converge from any of"):
        heckman_likelihood(deals(), FitOptions())
