"""Least squares and fixed effects: what they absorb, count, refuse and say."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import EstimationFailed, NotApplicable, TestResult
from pipeline.core.findings import InputProblem
from pipeline.estimators import diagnostics
from pipeline.estimators.least_squares import fixed_effects, ols
from tests.estimators.designs import deals, with_column, without


@pytest.fixture(scope="module")
def design() -> Design:
    return deals()


def dummies(design: Design) -> Design:
    """The design with an indicator for every level but the first of each effect."""
    columns, names = [], []
    for name, codes in design.effects.items():
        for level in np.unique(codes)[1:]:
            columns.append((codes == level).astype(float))
            names.append(f"{name} {level}")
    return replace(
        design, X=np.column_stack([design.X, *columns]), names=(*design.names, *names), effects={}
    )


@pytest.mark.parametrize("kind", ["classical", "hc0", "hc1"])
def test_fixed_effects_equal_indicators(design: Design, kind: str) -> None:
    options = FitOptions(covariance=kind)
    within, lsdv = fixed_effects(design, options), ols(dummies(design), options)
    for name in within.names:
        assert within.term(name) == pytest.approx(lsdv.term(name), rel=1e-9)
    assert within.df == lsdv.df
    assert within.fit["r_squared"] == pytest.approx(lsdv.fit["r_squared"])
    assert within.fit["sigma"] == pytest.approx(lsdv.fit["sigma"])
    assert within.effects == {"industry": 9, "year": 6}


@pytest.mark.parametrize("scale", [1e-9, 1e9])
def test_the_scale_of_a_regressor_does_not_matter(design: Design, scale: float) -> None:
    X = design.X.copy()
    X[:, design.names.index("run_up")] *= scale
    for fit in (ols, fixed_effects):
        one, other = fit(design, FitOptions()), fit(replace(design, X=X), FitOptions())
        for name in one.names:
            factor = 1 / scale if name == "run_up" else 1.0
            before, after = one.term(name), other.term(name)
            for part in ("coefficient", "std_error"):
                assert after[part] == pytest.approx(before[part] * factor, rel=1e-6)
            assert after["statistic"] == pytest.approx(before["statistic"], rel=1e-6)


@pytest.mark.parametrize("kind", ["hc2", "hc3"])
def test_leverage_of_one_effect_is_counted(design: Design, kind: str) -> None:
    one = replace(design, effects={"industry": design.effects["industry"]})
    options = FitOptions(covariance=kind)
    within, lsdv = fixed_effects(one, options), ols(dummies(one), options)
    assert within.term("run_up") == pytest.approx(lsdv.term("run_up"), rel=1e-9)


def test_leverage_of_two_effects_is_refused(design: Design) -> None:
    with pytest.raises(InputProblem) as caught:
        fixed_effects(design, FitOptions(covariance="hc3"))
    assert caught.value.findings[0].rule == "covariance_option"


def test_effects_not_nested_in_the_clusters_are_counted(design: Design) -> None:
    by_month = replace(design, clusters={"month": design.clusters["month"]})
    within = fixed_effects(by_month, FitOptions())
    lsdv = ols(dummies(by_month), FitOptions(cluster=True))
    # Year is nested in nothing coarser, and months lie within years: both effects count.
    assert within.fit["counted"] == within.fit["absorbed"] == 9 + 6 - 1
    assert within.term("run_up") == pytest.approx(lsdv.term("run_up"), rel=1e-9)
    assert within.df == len(np.unique(design.clusters["month"])) - 1


def test_effects_nested_in_the_clusters_are_not_counted(design: Design) -> None:
    nested = replace(
        design,
        effects={"acquirer": design.clusters["acquirer"]},
        clusters={"acquirer": design.clusters["acquirer"]},
    )
    within = fixed_effects(nested, FitOptions())
    assert within.fit["counted"] == 1
    n, k, G = within.n, 4, within.clusters["acquirer"]
    assert within.fit["small_sample_factor"] == pytest.approx(G / (G - 1) * (n - 1) / (n - k - 1))


def test_singletons_are_set_aside_and_counted(design: Design) -> None:
    codes = design.effects["industry"].copy()
    codes[:3] = [100, 101, 102]
    odd = replace(design, effects={"industry": codes})
    column = fixed_effects(odd, FitOptions())
    rest = replace(
        odd,
        y=odd.y[3:],
        X=odd.X[3:],
        Z=odd.Z[3:],
        rows=odd.rows[3:],
        selection=None,
        effects={"industry": codes[3:]},
        clusters={k: c[3:] for k, c in odd.clusters.items()},
    )
    fewer = fixed_effects(rest, FitOptions())
    assert column.fit["singletons"] == 3
    assert column.n == fewer.n == design.n - 3
    np.testing.assert_allclose(column.coefficients, fewer.coefficients, rtol=1e-12)
    np.testing.assert_allclose(column.covariance, fewer.covariance, rtol=1e-10)
    assert "3 deals alone in their group" in column.notes[0]


def test_a_control_fixed_within_groups_is_refused(design: Design) -> None:
    fixed = with_column(design, "regulated", (design.effects["industry"] > 4).astype(float))
    with pytest.raises(InputProblem) as caught:
        fixed_effects(fixed, FitOptions())
    finding = caught.value.findings[0]
    assert (finding.rule, finding.column) == ("absorbed", "regulated")
    assert "absorbed by the fixed effects" in str(caught.value)


def test_an_effect_within_another_is_said(design: Design) -> None:
    coarse = replace(design, effects={**design.effects, "sector": design.effects["industry"] // 3})
    column = fixed_effects(coarse, FitOptions())
    assert any("sector is fixed within industry" in note for note in column.notes)
    plain = fixed_effects(design, FitOptions())
    np.testing.assert_allclose(column.std_errors, plain.std_errors, rtol=1e-8)


def test_no_effects_and_all_singletons(design: Design) -> None:
    with pytest.raises(InputProblem) as caught:
        fixed_effects(without(design, "effects"), FitOptions())
    assert caught.value.findings[0].rule == "no_effects"
    alone = replace(design, effects={"deal": np.arange(design.n)})
    with pytest.raises(InputProblem) as caught:
        fixed_effects(alone, FitOptions())
    assert caught.value.findings[0].rule == "few_rows"


def test_effects_that_leave_no_degrees_of_freedom(design: Design) -> None:
    pairs = np.arange(design.n) // 2
    small = replace(
        design,
        y=design.y[:8],
        X=design.X[:8],
        Z=design.Z[:8],
        rows=design.rows[:8],
        effects={"pair": pairs[:8]},
        clusters={},
        selection=None,
    )
    with pytest.raises(InputProblem) as caught:
        fixed_effects(small, FitOptions())
    assert caught.value.findings[0].rule == "few_rows"


def test_a_deal_that_decides_a_coefficient_alone_is_named(design: Design) -> None:
    marked = np.zeros(design.n)
    marked[17] = 1.0
    odd = with_column(design, "hostile", marked)
    with pytest.raises(InputProblem) as caught:
        ols(odd, FitOptions())
    finding = caught.value.findings[0]
    assert finding.rule == "fitted_exactly"
    assert "deal 17" in finding.got
    assert ols(odd, FitOptions(covariance="hc1")).n == design.n


def test_an_exact_fit_is_withheld(design: Design) -> None:
    exact = replace(design, y=design.X @ np.arange(5.0))
    with pytest.raises(EstimationFailed, match="exactly"):
        ols(exact, FitOptions())


def test_words_of_the_estimands(design: Design) -> None:
    column = ols(design, FitOptions())
    assert column.estimand == (
        "difference in mean CAR[-1, +1] associated with paid_in_shares, holding the controls fixed"
    )
    slope = ols(replace(design, treatment="run_up"), FitOptions())
    assert "one more unit of run_up" in slope.estimand
    assert "same industry and year" in fixed_effects(design, FitOptions()).estimand
    assert any("industry and year) are not in this column" in note for note in column.notes)
    assert column.df_rule.endswith(f"= {design.n - 5} degrees of freedom")


def test_default_is_hc3_and_clusters_wait_to_be_asked_for(design: Design) -> None:
    assert ols(design, FitOptions()).covariance_name.startswith("HC3")
    assert ols(design, FitOptions()).clusters == {}
    asked = ols(design, FitOptions(cluster=True))
    assert set(asked.clusters) == {"acquirer", "month"}
    bare = without(design, "clusters")
    assert fixed_effects(bare, FitOptions()).covariance_name.startswith("HC1")


def test_collinearity_is_noted() -> None:
    design = deals()
    near = design.X[:, 2] + 0.01 * np.random.default_rng(0).normal(size=design.n)
    column = ols(with_column(design, "nearly", near), FitOptions())
    assert column.fit["condition_number"] > 30
    assert any("hard to tell apart" in note for note in column.notes)


def test_few_spare_deals_are_noted(design: Design) -> None:
    rows = slice(0, 9)
    small = replace(
        design,
        y=design.y[rows],
        X=design.X[rows],
        Z=design.Z[rows],
        rows=design.rows[rows],
        effects={},
        clusters={},
        selection=None,
    )
    assert any("Only 4 deals more" in note for note in ols(small, FitOptions()).notes)


def test_treatment_alone_has_nothing_to_test(design: Design) -> None:
    lone = replace(design, X=design.X[:, :2], names=design.names[:2], effects={})
    column = ols(lone, FitOptions())
    assert isinstance(column.tests["joint_controls"], NotApplicable)
    assert isinstance(column.tests["reset"], NotApplicable)
    assert column.fit["vif_treatment"] == pytest.approx(1.0)


def test_joint_test_of_one_control_is_its_t_squared(design: Design) -> None:
    two = replace(design, X=design.X[:, :3], names=design.names[:3])
    column = ols(two, FitOptions())
    joint, term = column.tests["joint_controls"], column.term("relative_size")
    assert isinstance(joint, TestResult)
    assert joint.statistic == pytest.approx(term["statistic"] ** 2)
    assert joint.p_value == pytest.approx(term["p_value"])


def test_intraclass_correlation_by_hand() -> None:
    # Groups (1, 3), (5, 7), (9, 11): MSB 32, MSW 2, m = 2 -> (32 - 2)/(32 + 2) = 15/17.
    y = np.array([1.0, 3, 5, 7, 9, 11])
    assert diagnostics.intraclass(y - y.mean(), np.arange(6) // 2) == pytest.approx(15 / 17)
    assert np.isnan(diagnostics.intraclass(y, np.arange(6)))


def test_wald_with_a_singular_covariance_has_no_answer() -> None:
    result = diagnostics.wald("W", "none", np.ones(2), np.ones((2, 2)), 10.0)
    assert isinstance(result, NotApplicable)


def test_extreme_ratios_of_the_collinearity_measures() -> None:
    X = np.column_stack([np.ones(20), np.arange(20.0)])
    assert diagnostics.condition_number(np.column_stack([X, np.zeros(20)])) == np.inf
    assert diagnostics.variance_inflation(X, 1) == pytest.approx(1.0)
