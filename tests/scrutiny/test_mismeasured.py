"""Regressors recorded with error: corrections on known truth, bounds, and refusals."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pipeline.core.design import Design, FitOptions
from pipeline.core.findings import InputProblem
from pipeline.core.rules import RULES
from pipeline.scrutiny import mismeasured
from pipeline.scrutiny.ground import Ground, ground_of
from pipeline.scrutiny.simex import ZETA, extrapolated, simex
from tests.estimators.designs import deals, without
from tests.scrutiny import worlds

PLAIN = FitOptions()


@pytest.fixture(scope="module")
def noisy() -> Ground:
    return ground_of(worlds.noisy_treatment(np.random.default_rng(1), 6000), PLAIN)


def rule_of(caught: pytest.ExceptionInfo[InputProblem]) -> str:
    rule = caught.value.findings[0].rule
    assert rule in RULES
    return rule


def test_correction_finds_the_effect_least_squares_halves(noisy: Ground) -> None:
    value, low, high = mismeasured.reliability_corrected(noisy, {"D": worlds.RELIABILITY}).term(
        "D", 0.999
    )
    assert noisy.estimate < 0.75 * worlds.EFFECT
    assert low < worlds.EFFECT < high
    left = mismeasured.attenuation(noisy, "D", worlds.RELIABILITY)
    assert value == pytest.approx(noisy.estimate / left, rel=1e-9)


@pytest.mark.parametrize("cluster", [False, True])
def test_full_reliability_changes_nothing(cluster: bool) -> None:
    """Clusters and fixed effects too: the sandwich is then that of the fit itself."""
    design = without(deals(), "selection")
    options = FitOptions(cluster=cluster)
    for effects in (False, True):
        ground = ground_of(design, options, effects=effects)
        found = mismeasured.reliability_corrected(ground, {"run_up": 1.0})
        at = found.names.index(design.treatment)
        assert found.coefficients[at] == pytest.approx(ground.estimate, rel=1e-10)
        assert np.sqrt(found.covariance[at, at]) == pytest.approx(ground.robust, rel=1e-8)


@given(reliability=st.floats(0.6, 1.0), unit=st.floats(0.01, 100))
@settings(max_examples=25, deadline=None)
def test_units_do_not_matter(reliability: float, unit: float) -> None:
    design = worlds.noisy_treatment(np.random.default_rng(2), 300)
    scaled = replace(design, X=design.X * np.array([1.0, unit, 1.0]))
    first = mismeasured.reliability_corrected(ground_of(design, PLAIN), {"D": reliability})
    other = mismeasured.reliability_corrected(ground_of(scaled, PLAIN), {"D": reliability})
    assert other.coefficients[1] * unit == pytest.approx(first.coefficients[1], rel=1e-7)
    assert other.covariance[1, 1] * unit**2 == pytest.approx(first.covariance[1, 1], rel=1e-6)


@pytest.mark.parametrize("value", [0.0, -0.2, 1.01, float("nan")])
def test_reliability_out_of_range(noisy: Ground, value: float) -> None:
    with pytest.raises(InputProblem) as caught:
        mismeasured.reliability_corrected(noisy, {"D": value})
    assert rule_of(caught) == "reliability_range"


def test_reliability_that_leaves_nothing(noisy: Ground) -> None:
    """Below the R² of the recorded variable on the others the moments are not positive."""
    floor = 1 - (1 - worlds.RELIABILITY) / (
        1 - mismeasured.attenuation(noisy, "D", worlds.RELIABILITY)
    )
    mismeasured.reliability_corrected(noisy, {"D": floor + 0.01})
    with pytest.raises(InputProblem) as caught:
        mismeasured.reliability_corrected(noisy, {"D": floor - 0.01})
    assert rule_of(caught) == "reliability_too_low"
    assert f"{floor:.2f}" in caught.value.findings[0].remedy


def test_reliability_of_a_stranger(noisy: Ground) -> None:
    with pytest.raises(InputProblem) as caught:
        mismeasured.reliability_corrected(noisy, {"unheard_of": 0.9})
    assert rule_of(caught) == "reliability_variable"


def test_direct_and_reverse_regression_bound_the_truth(noisy: Ground) -> None:
    bounds = mismeasured.reverse_bounds(noisy, ("D",))["D"]
    assert bounds.low == pytest.approx(noisy.estimate, rel=1e-10)
    assert bounds.low < worlds.EFFECT < bounds.high
    left = np.column_stack([noisy.y, noisy.D])
    left = left - noisy.W @ np.linalg.lstsq(noisy.W, left)[0]
    y, D = left.T
    assert bounds.high == pytest.approx(float(y @ y) / float(y @ D), rel=1e-9)


def test_a_mismeasured_control_bounds_the_effect_of_the_treatment() -> None:
    """The correction at any reliability lies between the ends, which 1 and the least reach."""
    design = without(deals(), "selection", "effects")
    ground = ground_of(design, PLAIN)
    bounds = mismeasured.reverse_bounds(ground, ("run_up",))[design.treatment]
    least = 1 - mismeasured.attenuation(ground, "run_up", 0.0)
    inside = [
        mismeasured.reliability_corrected(ground, {"run_up": r}).term(design.treatment, 0.95)[0]
        for r in (1.0, 0.9)
    ]
    assert least > 0
    for value in inside:
        assert bounds.low - 1e-12 <= value <= bounds.high + 1e-12


def test_bounds_are_infinite_when_the_regressions_differ_in_sign() -> None:
    rng = np.random.default_rng(4)
    a, b = rng.normal(size=(2, 400))
    twin = 0.8 * a + 0.6 * b
    design = worlds.made(0.3 * a + 0.3 * twin + 2 * rng.normal(size=400), a, twin)
    bounds = mismeasured.reverse_bounds(ground_of(design, PLAIN), ("D", "x0"))
    assert not bounds["D"].bounded
    assert not bounds["x0"].bounded


@pytest.mark.parametrize("rates", [(0.1, 0.2), (0.0, 0.15), (0.2, 0.0)])
def test_misclassified_choice(rates: tuple[float, float]) -> None:
    design = worlds.misrecorded_choice(np.random.default_rng(7), 20_000, *rates)
    ground = ground_of(design, PLAIN)
    value, low, high = mismeasured.misclassified(ground, *rates, 0.999)
    assert low < worlds.EFFECT < high
    assert abs(ground.estimate) < abs(value)


def test_no_misclassification_changes_nothing() -> None:
    ground = ground_of(without(deals(), "selection", "effects"), PLAIN)
    value, low, high = mismeasured.misclassified(ground, 0.0, 0.0, 0.95)
    assert value == pytest.approx(ground.estimate, rel=1e-10)
    at_one = mismeasured.reliability_corrected(ground, {"run_up": 1.0}).term("paid_in_shares", 0.95)
    assert (low, high) == pytest.approx(at_one[1:], rel=1e-8)


@pytest.mark.parametrize("rates", [(-0.1, 0.0), (0.6, 0.5), (0.0, 0.9), (0.9, 0.0)])
def test_rates_out_of_range(rates: tuple[float, float]) -> None:
    ground = ground_of(without(deals(), "selection", "effects"), PLAIN)
    with pytest.raises(InputProblem) as caught:
        mismeasured.misclassified(ground, *rates, 0.95)
    assert rule_of(caught) == "misclassification_range"


def test_a_measured_treatment_is_not_misclassified(noisy: Ground) -> None:
    with pytest.raises(InputProblem) as caught:
        mismeasured.misclassified(noisy, 0.1, 0.1, 0.95)
    assert rule_of(caught) == "treatment_not_binary"


def test_rescaling_asks_for_a_share() -> None:
    assert mismeasured.rescaled(0.1, 0.0, 0.2, 0.5) == (0.2, 0.0, 0.4)
    with pytest.raises(ValueError, match="kept"):
        mismeasured.rescaled(0.1, 0.0, 0.2, 0.0)


def test_simulated_extrapolation_by_the_right_curve(noisy: Ground) -> None:
    """The rational curve is exact for one mismeasured regressor; the quadratic falls short."""
    film = simex(noisy, "D", worlds.RELIABILITY, seed=3, draws=60)
    exact = mismeasured.reliability_corrected(noisy, {"D": worlds.RELIABILITY}).term("D", 0.95)[0]
    assert film.estimates["rational"] == pytest.approx(exact, rel=0.03)
    distance = [abs(film.estimates[kind] - exact) for kind in ("linear", "quadratic", "rational")]
    assert distance == sorted(distance, reverse=True)
    assert film.path[0] == pytest.approx(noisy.estimate, rel=1e-10)
    assert film.variances[0] == pytest.approx(noisy.robust**2, rel=1e-10)
    again = simex(noisy, "D", worlds.RELIABILITY, seed=3, draws=60)
    assert again.estimates == film.estimates


def test_simulated_errors_of_two_way_clusters_start_at_their_own() -> None:
    """Without added error the variance is the sum of the ways less their intersection."""
    rng = np.random.default_rng(8)
    design = worlds.noisy_treatment(rng, 300)
    company, year = rng.integers(0, 30, size=300), rng.integers(0, 12, size=300)
    y = design.y + 2 * rng.normal(size=30)[company] + 2 * rng.normal(size=12)[year]
    ground = ground_of(
        replace(design, y=y, clusters={"company": company, "year": year}), FitOptions()
    )
    film = simex(ground, "D", worlds.RELIABILITY, seed=3, draws=5)
    assert film.variances[0] == pytest.approx(ground.robust**2, rel=1e-8)


def test_simulated_errors_lie_around_those_of_the_correction(noisy: Ground) -> None:
    """Both with the error variance, not the reliability, as known: simulation takes it so."""
    film = simex(noisy, "D", worlds.RELIABILITY, seed=5, draws=200)
    X, y, n = noisy.sample.X, noisy.y, noisy.n
    sigma = np.array([0.0, mismeasured.error_variance(noisy, "D", worlds.RELIABILITY), 0.0])
    inverse = np.linalg.inv(X.T @ X - n * np.diag(sigma))
    b = inverse @ (X.T @ y)
    psi = (X * (y - X @ b)[:, None] + sigma * b) @ inverse
    error = float(np.sqrt((psi.T @ psi)[1, 1] * n / (n - 3)))
    assert 0.75 * error < film.std_errors["quadratic"] < error
    assert error < film.std_errors["rational"] < 1.25 * error


@given(a=st.floats(-2, 2), b=st.floats(0.1, 3), gap=st.floats(0.3, 4))
@settings(max_examples=40, deadline=None)
def test_curves_are_carried_back_exactly(a: float, b: float, gap: float) -> None:
    zeta = np.array([0.0, *ZETA])
    rational = a + b / (1 + gap + zeta)
    assert extrapolated(zeta, rational, "rational") == pytest.approx(
        a + b / gap, rel=1e-3, abs=1e-3
    )
    bent = a + b * zeta + gap * zeta**2
    assert extrapolated(zeta, bent, "quadratic") == pytest.approx(a - b + gap, abs=1e-9)
    assert extrapolated(zeta, a + b * zeta, "linear") == pytest.approx(a - b, abs=1e-9)


def test_simulation_needs_a_reliability(noisy: Ground) -> None:
    with pytest.raises(InputProblem) as caught:
        simex(noisy, "D", 1.5, seed=0)
    assert rule_of(caught) == "reliability_range"


def test_options_asking_for_leverage_errors_are_met_by_sums() -> None:
    design: Design = without(deals(), "selection", "clusters")
    for asked in ("hc2", "hc3"):
        ground = ground_of(design, FitOptions(covariance=asked))
        assert ground.sample.rule.kind == "hc1"
