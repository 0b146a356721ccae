"""The probit: its maximum, its tails and what it refuses."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import special, stats

from pipeline.core.design import FitOptions
from pipeline.core.estimate import EstimationFailed
from pipeline.core.findings import InputProblem
from pipeline.estimators import probit
from pipeline.estimators.errors import ErrorRule


def equation(chosen: np.ndarray, *columns: np.ndarray) -> probit.Equation:
    W = np.column_stack([np.ones(len(chosen)), *columns])
    names = ("constant", *(f"x{at}" for at in range(1, W.shape[1])))
    return probit.Equation(chosen, W, names, "announcing a deal", names[-1])


@pytest.fixture(scope="module")
def typical() -> probit.Equation:
    rng = np.random.default_rng(6)
    x = rng.normal(size=(400, 2))
    return equation(x @ [1.0, -0.5] + rng.normal(size=400) > 0.3, x[:, 0], x[:, 1])


def log_likelihood(e: probit.Equation, gamma: np.ndarray) -> float:
    return float(special.log_ndtr(np.where(e.chosen, 1, -1) * (e.W @ gamma)).sum())


def test_nothing_near_the_maximum_is_higher(typical: probit.Equation) -> None:
    fit = probit.fit_probit(typical)
    top = log_likelihood(typical, fit.coefficients)
    assert fit.log_likelihood == pytest.approx(top, rel=1e-12)
    rng = np.random.default_rng(0)
    for move in 1e-3 * rng.normal(size=(50, 3)):
        assert log_likelihood(typical, fit.coefficients + move) < top
    # Central differences of the log-likelihood: the gradient is zero to their own error.
    step = 1e-5 * np.eye(3)
    gradient = [
        (
            log_likelihood(typical, fit.coefficients + s)
            - log_likelihood(typical, fit.coefficients - s)
        )
        / 2e-5
        for s in step
    ]
    np.testing.assert_allclose(gradient, 0, atol=1e-5)


def test_information_is_the_curvature(typical: probit.Equation) -> None:
    fit = probit.fit_probit(typical)
    h = 1e-4
    curvature = np.empty((3, 3))
    for i in range(3):
        for j in range(3):
            a, b = h * np.eye(3)[i], h * np.eye(3)[j]
            curvature[i, j] = -sum(
                s * t * log_likelihood(typical, fit.coefficients + s * a + t * b)
                for s in (1, -1)
                for t in (1, -1)
            ) / (4 * h * h)
    np.testing.assert_allclose(np.linalg.inv(curvature), fit.information, rtol=1e-4)


def test_constant_alone_is_the_quantile_of_the_share() -> None:
    chosen = np.arange(50) < 15
    fit = probit.fit_probit(
        probit.Equation(chosen, np.ones((50, 1)), ("constant",), "announcing", "constant")
    )
    assert fit.coefficients[0] == pytest.approx(stats.norm.ppf(0.3), abs=1e-12)
    assert fit.log_likelihood == pytest.approx(fit.log_likelihood_constant)


def test_mills_ratio_into_both_tails() -> None:
    a = np.array([-1e4, -60.0, -10.0, 0.0, 5.0, 40.0])
    # Asymptote of Abramowitz and Stegun (1964), 26.2.12: φ/Φ -> -a - 1/a in the left tail.
    assert probit.mills(a[:2]) == pytest.approx(-a[:2] - 1 / a[:2], rel=1e-6)
    middle = stats.norm.pdf(a[2:5]) / stats.norm.cdf(a[2:5])
    assert probit.mills(a[2:5]) == pytest.approx(middle, rel=1e-12)
    assert probit.mills(a[5:])[0] == 0.0


def test_a_dummy_that_decides_is_named() -> None:
    rng = np.random.default_rng(1)
    chosen = rng.random(80) < 0.5
    dummy = np.where(chosen, rng.random(80) < 0.3, False).astype(float)
    with pytest.raises(InputProblem) as caught:
        probit.fit_probit(equation(chosen, rng.normal(size=80), dummy))
    finding = caught.value.findings[0]
    assert (finding.rule, finding.column) == ("separation", "x2")


def test_a_threshold_that_decides_is_named() -> None:
    x = np.linspace(-1, 1, 60)
    other = np.random.default_rng(2).normal(size=60)
    with pytest.raises(InputProblem) as caught:
        probit.fit_probit(equation(x > 0.2, other, -x))
    assert caught.value.findings[0].column == "x2"


@pytest.mark.parametrize(
    ("chosen", "x", "said"),
    [
        ([0, 0, 1, 1, 0, 1], [0, 0, 0, 1, 0, 1], "all with x1 = 1 chose it"),
        ([1, 1, 0, 0, 1, 0], [0, 0, 0, 1, 0, 1], "all with x1 = 1 did not choose it"),
        ([1, 1, 0, 0, 1, 0], [0, 0, 1, 1, 1, 1], "all with x1 = 0 chose it"),
        ([0, 0, 1, 1, 0, 1], [0, 0, 1, 1, 1, 1], "all with x1 = 0 did not choose it"),
        ([0, 0, 1, 1, 0, 1], [1, 2, 3, 4, 2, 9], "all with x1 from 3 chose it, and nobody else"),
        ([1, 1, 0, 0, 1, 0], [1, 2, 3, 4, 2, 9], "all with x1 up to 2 chose it, and nobody else"),
        ([0, 0, 1, 1, 0, 1], [1, 2, 2, 4, 2, 9], "all with x1 4 to 9 chose it"),
    ],
)
def test_the_level_that_decides_is_named(chosen: list[int], x: list[float], said: str) -> None:
    e = equation(np.array(chosen, dtype=bool), np.array(x, dtype=float))
    with pytest.raises(InputProblem) as caught:
        probit.refuse_single_separation(e.chosen, e.W, e.names)
    finding = caught.value.findings[0]
    assert finding.rule == "separation"
    assert said in finding.got


@pytest.mark.parametrize("gap", [0.0, 0.3])
def test_a_combination_that_decides_is_named(gap: float) -> None:
    rng = np.random.default_rng(3)
    x = rng.normal(size=(300, 3))
    index = x[:, 0] - x[:, 1]
    keep = np.abs(index) > gap
    with pytest.raises(InputProblem) as caught:
        probit.fit_probit(equation(index[keep] > 0, *x[keep].T))
    finding = caught.value.findings[0]
    assert finding.rule == "separation"
    assert {"x1", "x2"} <= set(finding.column.split(", "))


@pytest.mark.parametrize("seed", range(8))
def test_a_strong_but_imperfect_variable_is_fitted(seed: int) -> None:
    rng = np.random.default_rng(seed)
    x = rng.normal(size=300)
    chosen = 4 * x + rng.normal(size=300) > 0
    fit = probit.fit_probit(equation(chosen, x))
    assert 2 < fit.coefficients[1] < 8


def test_one_kind_of_candidate_is_refused() -> None:
    for chosen in (np.ones(20, dtype=bool), np.zeros(20, dtype=bool)):
        with pytest.raises(InputProblem) as caught:
            probit.fit_probit(equation(chosen, np.arange(20.0)))
        assert caught.value.findings[0].rule == "one_outcome"


def test_no_convergence_is_withheld(
    typical: probit.Equation, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(probit, "MOST_STEPS", 1)
    with pytest.raises(EstimationFailed, match="did not converge"):
        probit.fit_probit(typical)


def test_units_do_not_matter(typical: probit.Equation) -> None:
    scale = np.array([1.0, 1e7, 1e-7])
    wide = probit.Equation(typical.chosen, typical.W * scale, typical.names, "a", "x1")
    one, other = probit.fit_probit(typical), probit.fit_probit(wide)
    np.testing.assert_allclose(other.coefficients * scale, one.coefficients, rtol=1e-9)
    np.testing.assert_allclose(
        other.information * np.outer(scale, scale), one.information, rtol=1e-8
    )


def test_area_under_the_curve_by_hand() -> None:
    # Pairs (yes, no): (3,1) (3,2) (2,1) right, (2,2) tied: 3.5 of 4.
    area = probit.area_under_curve(np.array([True, True, False, False]), np.array([3.0, 2, 1, 2]))
    assert area == pytest.approx(3.5 / 4)


def test_influence_predicts_leaving_a_row_out(typical: probit.Equation) -> None:
    fit = probit.fit_probit(typical)
    for row in (3, 77, 250):
        keep = np.arange(400) != row
        less = probit.fit_probit(
            probit.Equation(typical.chosen[keep], typical.W[keep], typical.names, "a", "x1")
        )
        moved = fit.coefficients - less.coefficients
        # First order in 1/n: the remainder is of the order of the leverage, a few per cent.
        np.testing.assert_allclose(moved, fit.influence[row], rtol=0.15, atol=2e-4)


def test_clustered_probit_is_read_against_t(typical: probit.Equation) -> None:
    fit = probit.fit_probit(typical)
    rule = ErrorRule("cluster", {"country": np.arange(400) % 12}, 400)
    column = probit.probit_estimate(fit, typical, rule, FitOptions())
    assert column.df == 11
    assert column.fit["small_sample_factor"] == pytest.approx(12 / 11)
    plain = probit.probit_estimate(fit, typical, ErrorRule("classical", {}, 400), FitOptions())
    assert np.isinf(plain.df)
    assert "marginal_effect.x1" in plain.fit
    assert "marginal_effect.constant" not in plain.fit
