"""Returns read as surprises: derivatives, another optimiser, recovery, and refusals."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import integrate, optimize, stats

from pipeline.core.design import Design, FitOptions, SelectionRows
from pipeline.core.estimate import EstimationFailed
from pipeline.core.selection import GainTerm, frame_of
from pipeline.estimators.expected_gain import (
    FORESEEN,
    PRIVATE,
    foreseen_gain,
    gain_terms,
    mean_surprise,
    private_terms,
)
from tests.estimators.designs import deals, without

GAMMA, OMEGA = np.array([0.010, 0.030, -0.006]), 0.02


def announced(seed: int, n: int, noise: float = 0.004) -> tuple[np.ndarray, np.ndarray]:
    """Returns and regressors of the deals announced among ``n`` companies, from the model."""
    rng = np.random.default_rng(seed)
    X = np.column_stack([np.ones(n), rng.normal(size=n), rng.integers(0, 2, size=n)])
    gain = X @ GAMMA + OMEGA * rng.normal(size=n)
    a = X @ GAMMA / OMEGA
    foreseen = stats.norm.cdf(a) * (X @ GAMMA) + OMEGA * stats.norm.pdf(a)
    seen = gain > 0
    y = gain - foreseen + noise * rng.normal(size=n)
    return y[seen], X[seen]


@settings(max_examples=20, deadline=None, derandomize=True)
@given(st.lists(st.floats(-1.5, 1.5), min_size=3, max_size=3), st.floats(-1.0, 1.0))
def test_derivatives_are_those_of_the_value(gamma: list[float], log_omega: float) -> None:
    X = np.random.default_rng(1).normal(size=(40, 3))
    theta = np.append(gamma, log_omega)
    _, slopes = mean_surprise(X, theta)
    for at in range(4):
        ahead, behind = theta.copy(), theta.copy()
        ahead[at] += 1e-6
        behind[at] -= 1e-6
        rise = (mean_surprise(X, ahead)[0] - mean_surprise(X, behind)[0]) / 2e-6
        np.testing.assert_allclose(slopes[:, at], rise, rtol=1e-6, atol=1e-7)


@pytest.mark.parametrize("mean", [-0.03, 0.0, 0.02, 0.05])
def test_surprise_is_the_gain_known_less_the_gain_foreseen(mean: float) -> None:
    """E[y | y > 0] - E[max(y, 0)] by numerical integration."""
    density = stats.norm(mean, OMEGA).pdf
    paid = integrate.quad(lambda y: y * density(y), 0, 0.5, epsabs=1e-14)[0]
    chance = integrate.quad(density, 0, 0.5, epsabs=1e-14)[0]
    value, _ = mean_surprise(np.array([[mean]]), np.array([1.0, np.log(OMEGA)]))
    assert value[0] == pytest.approx(paid / chance - paid, rel=1e-8)


def test_another_optimiser_ends_in_the_same_place() -> None:
    y, X = announced(4, 6000)
    fit = foreseen_gain(y, X)

    def squares(theta: np.ndarray) -> float:
        return 1e4 * float(np.sum((y - mean_surprise(X, theta)[0]) ** 2))

    start = np.append(1.2 * fit.gamma, np.log(fit.omega) + 0.2)
    other = optimize.minimize(
        squares, start, method="Nelder-Mead",
        options={"maxiter": 20_000, "maxfev": 20_000, "xatol": 1e-10, "fatol": 1e-12},
    )  # fmt: skip
    np.testing.assert_allclose(other.x[:3], fit.gamma, rtol=1e-3)
    assert np.exp(other.x[3]) == pytest.approx(fit.omega, rel=1e-3)
    assert squares(np.append(fit.gamma, np.log(fit.omega))) <= other.fun * (1 + 1e-12)


def test_gain_is_recovered_where_least_squares_has_the_other_sign() -> None:
    """Companies that gain more are foreseen more: the return falls where the gain rises."""
    y, X = announced(5, 20_000)
    fit = foreseen_gain(y, X)
    error = np.sqrt((fit.influence**2).sum(axis=0))
    assert (np.abs(np.append(fit.gamma, fit.omega) - [*GAMMA, OMEGA]) < 4 * error).all()
    slopes = np.linalg.lstsq(X, y)[0]
    assert slopes[1] < 0 < fit.gamma[1]


def test_influence_is_that_of_gauss_newton() -> None:
    y, X = announced(6, 4000)
    fit = foreseen_gain(y, X)
    _, J = mean_surprise(X, np.append(fit.gamma, np.log(fit.omega)))
    J[:, -1] /= fit.omega
    plain = (J * fit.residuals[:, None]) @ np.linalg.inv(J.T @ J)
    np.testing.assert_allclose(fit.influence, plain, rtol=1e-5, atol=1e-10)
    assert np.abs(fit.influence.sum(axis=0)).max() < 1e-6


def test_units_of_return_and_regressor() -> None:
    y, X = announced(7, 4000)
    one, other = foreseen_gain(y, X), foreseen_gain(100 * y, X * [1, 1000, 1])
    np.testing.assert_allclose(other.gamma, 100 * one.gamma / [1, 1000, 1], rtol=1e-6)
    assert other.omega == pytest.approx(100 * one.omega, rel=1e-6)


def test_mean_loss_does_not_fit_the_model() -> None:
    y, X = announced(8, 2000)
    with pytest.raises(EstimationFailed, match="not positive"):
        foreseen_gain(y - 0.1, X)


def test_pure_noise_gives_no_gain() -> None:
    rng = np.random.default_rng(9)
    X = np.column_stack([np.ones(200), rng.normal(size=200)])
    with pytest.raises(EstimationFailed):
        foreseen_gain(0.001 + 0.05 * np.abs(rng.normal(size=200)), X)


def news(seed: int, A: int, pi: float, shift: float = 0.0) -> Design:
    """Candidates whose announcement reveals π times their private news."""
    rng = np.random.default_rng(seed)
    w, x = rng.normal(size=(2, A))
    W = np.column_stack([np.ones(A), w, x])
    v = rng.normal(size=A)
    seen = W @ [-0.3, 0.8, 0.4] + v > 0
    n = int(seen.sum())
    row = np.full(A, -1)
    row[seen] = np.arange(n)
    y = shift + pi * v[seen] + 0.01 * rng.normal(size=n)
    rows = SelectionRows(W, ("constant", "wave", "size"), ("wave",), seen, row)
    return Design(
        y=y,
        X=np.column_stack([np.ones(n), x[seen]]),
        names=("constant", "size"),
        treatment="size",
        rows=tuple(map(str, range(n))),
        outcome="CAR",
        selection=rows,
    )


def test_private_news_is_recovered() -> None:
    alone, beside, constant = private_terms(news(1, 8000, 0.02), FitOptions())
    for term in (alone, beside):
        assert abs(term.estimate - 0.02) < 4 * term.std_error
    assert abs(constant.estimate) < 4 * constant.std_error
    assert alone.std_error < beside.std_error
    assert alone.model == PRIVATE
    assert "news" in alone.estimand


def test_a_constant_tells_that_the_model_does_not_fit() -> None:
    *_, constant = private_terms(news(2, 8000, 0.02, shift=-0.03), FitOptions())
    assert constant.p_value < 1e-6


def test_private_news_influence_by_leaving_candidates_out() -> None:
    design = news(3, 400, 0.02)
    term = private_terms(design, FitOptions())[0]
    rows = design.selection
    assert rows is not None
    left = []
    for out in range(400):
        keep = np.delete(np.arange(400), out)
        kept = rows.outcome_row[keep]
        order = kept[kept >= 0]
        place = np.full(design.n, -1)
        place[order] = np.arange(len(order))
        some = replace(
            rows, W=rows.W[keep], selected=rows.selected[keep],
            outcome_row=np.where(kept >= 0, place[kept], -1),
        )  # fmt: skip
        part = replace(
            design, y=design.y[order], X=design.X[order], selection=some,
            rows=tuple(map(str, order)),
        )  # fmt: skip
        left.append(private_terms(part, FitOptions())[0].estimate)
    jackknife = np.sqrt(np.sum((np.array(left) - term.estimate) ** 2))
    assert term.std_error == pytest.approx(jackknife, rel=0.05)


def test_both_models_have_rows_and_a_reason_where_there_is_no_number() -> None:
    design = replace(deals(), y=deals().y - 1.0)
    frame = frame_of(gain_terms(design, FitOptions()), GainTerm)
    foreseen = frame[frame["model"] == FORESEEN]
    assert foreseen["reason"].str.contains("not positive").all()
    assert np.isnan(foreseen["estimate"]).all()
    assert (frame.loc[frame["model"] == PRIVATE, "reason"] == "").all()
    only = gain_terms(without(design, "selection"), FitOptions())
    assert {term.model for term in only} == {FORESEEN}
