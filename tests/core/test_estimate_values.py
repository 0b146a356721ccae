"""Distributions of statistics and intervals against scipy.stats; estimates as values."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from pipeline.core.estimate import (
    ConfidenceSet,
    Estimate,
    Shape,
    chi2_test,
    f_test,
    t_reach,
    t_tail,
    t_test,
    z_test,
)

STATISTICS = [0.0, 0.3, -1.96, 2.5, -6.0, 38.0]
NO_NULL = "nothing"


@pytest.mark.parametrize("statistic", STATISTICS)
@pytest.mark.parametrize("df", [1.0, 7.3, 60.0, 4000.0])
def test_student_tails(statistic: float, df: float) -> None:
    """Both tails from the survival function: no digit is lost far out."""
    wanted = 2 * stats.t.sf(abs(statistic), df)
    assert t_tail(statistic, df) == pytest.approx(wanted, rel=1e-9)
    found = t_test("t", NO_NULL, statistic, df)
    assert (found.p_value, found.df, found.distribution) == (t_tail(statistic, df), (df,), "t")


@pytest.mark.parametrize("statistic", [*STATISTICS[:5], 20.0])
def test_normal_tails(statistic: float) -> None:
    wanted = 2 * stats.norm.sf(abs(statistic))
    assert z_test("z", NO_NULL, statistic).p_value == pytest.approx(wanted, rel=1e-10)
    assert t_tail(statistic, np.inf) == pytest.approx(wanted, rel=1e-10)


@pytest.mark.parametrize("statistic", [0.1, 3.84, 25.0, 300.0])
def test_chi_squared_and_f_tails(statistic: float) -> None:
    chi2 = chi2_test("c", NO_NULL, statistic, 3)
    assert chi2.p_value == pytest.approx(stats.chi2.sf(statistic, 3), rel=1e-10)
    f = f_test("f", NO_NULL, statistic, 2, 41.0, facts={"a": 1.0})
    assert f.p_value == pytest.approx(stats.f.sf(statistic, 2, 41), rel=1e-9)
    assert (f.df, f.facts) == ((2.0, 41.0), {"a": 1.0})


@pytest.mark.parametrize("level", [0.5, 0.9, 0.95, 0.999])
@pytest.mark.parametrize("df", [2.0, 30.0, np.inf])
def test_reach_of_an_interval(level: float, df: float) -> None:
    law = stats.norm if np.isinf(df) else stats.t(df)
    assert t_reach(level, df) == pytest.approx(law.isf((1 - level) / 2), rel=1e-9)


@pytest.mark.parametrize(
    ("shape", "inside", "outside"),
    [
        (Shape.INTERVAL, [-1.0, 0.0, 2.0], [-1.1, 2.1]),
        (Shape.RAYS, [-1.0, -7.0, 2.0], [0.0, 1.9]),
        (Shape.LINE, [-1e9, 0.0, 1e9], []),
        (Shape.EMPTY, [], [-1e9, 0.0, 1e9]),
    ],
)
def test_what_a_confidence_set_covers(
    shape: Shape, inside: list[float], outside: list[float]
) -> None:
    bounded = shape in (Shape.INTERVAL, Shape.RAYS)
    low, high = (-1.0, 2.0) if bounded else (np.nan, np.nan)
    found = ConfidenceSet(shape, low, high, 0.95, "any")
    assert all(found.covers(value) for value in inside)
    assert not any(found.covers(value) for value in outside)


def estimate(**changes: object) -> Estimate:
    parts: dict[str, object] = {
        "estimator": "any",
        "title": "Any",
        "estimand": "the slope",
        "names": ("constant", "shares"),
        "coefficients": np.array([0.01, -0.02]),
        "covariance": np.array([[4e-6, 1e-6], [1e-6, 9e-6]]),
        "df": 40.0,
        "df_rule": "n - k",
        "covariance_name": "robust",
        "n": 42,
        "treatment": "shares",
        "outcome": "CAR",
        "level": 0.9,
    }
    return Estimate(**{**parts, **changes})  # type: ignore[arg-type]


def test_everything_printed_is_derived() -> None:
    found = estimate().term("shares")
    law = stats.t(40)
    assert found["std_error"] == pytest.approx(0.003)
    assert found["statistic"] == pytest.approx(-0.02 / 0.003)
    assert found["p_value"] == pytest.approx(2 * law.sf(0.02 / 0.003), rel=1e-9)
    half = law.isf(0.05) * 0.003
    assert (found["ci_low"], found["ci_high"]) == pytest.approx((-0.02 - half, -0.02 + half))


def test_a_robust_set_takes_the_place_of_the_interval() -> None:
    plain = estimate().interval
    assert plain.shape is Shape.INTERVAL
    assert plain.covers(-0.02)
    rays = ConfidenceSet(Shape.RAYS, -0.1, 0.1, 0.9, "inverted")
    assert estimate(robust_set=rays).interval is rays


def test_a_covariance_of_another_size_is_refused() -> None:
    with pytest.raises(ValueError, match="2 names"):
        estimate(covariance=np.eye(3))
