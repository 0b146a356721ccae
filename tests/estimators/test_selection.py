"""Heckman's two steps: formulas against brute force, refusals and warnings."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from pipeline.core.design import Design, FitOptions, SelectionRows
from pipeline.core.estimate import EstimationFailed, TestResult
from pipeline.core.findings import InputProblem
from pipeline.estimators import probit, selection
from pipeline.estimators.selection import heckman_two_step
from pipeline.estimators.selection_rows import checked_selection
from tests.estimators.designs import deals, without


@pytest.fixture(scope="module")
def design() -> Design:
    return deals()


def candidates(design: Design) -> SelectionRows:
    assert design.selection is not None
    return design.selection


def two_steps(design: Design, keep: np.ndarray) -> np.ndarray:
    """Outcome coefficients from the candidates in ``keep``, by a plain reading of the method."""
    s = candidates(design)
    W, chosen, row = s.W[keep], s.selected[keep], s.outcome_row[keep]
    fit = probit.fit_probit(probit.Equation(chosen, W, s.names, "a", s.names[-1]))
    a = W[chosen] @ fit.coefficients
    ratio = stats.norm.pdf(a) / stats.norm.cdf(a)
    X = np.column_stack([design.X[row[chosen]], ratio])
    return np.asarray(np.linalg.lstsq(X, design.y[row[chosen]], rcond=None)[0])


def test_coefficients_by_a_plain_reading(design: Design) -> None:
    column = heckman_two_step(design, FitOptions())
    every = np.ones(len(candidates(design).selected), dtype=bool)
    np.testing.assert_allclose(column.coefficients, two_steps(design, every), rtol=1e-9)
    assert column.names[-1] == "inverse_mills"
    assert column.n == design.n
    assert np.isinf(column.df)
    assert column.fit["rho"] * column.fit["sigma"] == pytest.approx(column.coefficients[-1])


def test_sandwich_predicts_leaving_a_candidate_out(design: Design) -> None:
    s = candidates(design)
    column = heckman_two_step(design, FitOptions(covariance="hc0"))
    first = probit.fit_probit(probit.Equation(s.selected, s.W, s.names, "a", s.names[-1]))
    step = selection.second_step(design, s, first, column.names)
    influence = selection.stacked_influence(step, first, s)
    np.testing.assert_allclose(influence.T @ influence, column.covariance, rtol=1e-10)
    scale = column.std_errors
    rows = [4, 90, 333, *np.flatnonzero(~s.selected)[[3, 50]]]
    for row in rows:
        keep = np.arange(len(s.selected)) != row
        moved = (column.coefficients - two_steps(design, keep)) / scale
        # First order in 1/n: what is left over is of the order of the leverage.
        np.testing.assert_allclose(moved, influence[row] / scale, rtol=0.2, atol=3e-3)


def test_clusters_of_candidates(design: Design) -> None:
    column = heckman_two_step(design, FitOptions(cluster=True))
    groups = len(np.unique(candidates(design).clusters["acquirer"]))
    assert column.clusters == {"acquirer": groups}
    assert column.df == groups - 1
    assert "stacked moments of both steps" in column.covariance_name
    assert column.stages[0].df == groups - 1


def test_corrected_errors_are_the_naive_ones_without_selection() -> None:
    # With ρ = 0 the formula is σ²(X*'X*)⁻¹: least squares with divisor n.
    design = deals()
    s = candidates(design)
    first = probit.fit_probit(probit.Equation(s.selected, s.W, s.names, "a", s.names[-1]))
    step = selection.second_step(design, s, first, (*design.names, "inverse_mills"))
    still = replace(step, rho=0.0)
    V = selection.corrected_covariance(still, first.information)
    np.testing.assert_allclose(V, step.sigma**2 * step.bread, rtol=1e-8)


def test_covariance_that_is_not_positive_is_withheld() -> None:
    design = deals()
    s = candidates(design)
    first = probit.fit_probit(probit.Equation(s.selected, s.W, s.names, "a", s.names[-1]))
    step = selection.second_step(design, s, first, (*design.names, "inverse_mills"))
    with pytest.raises(EstimationFailed, match=r"errors is 9\.00; robust"):
        selection.corrected_covariance(replace(step, rho=9.0), 1e-9 * first.information)


def test_tests_and_stage(design: Design) -> None:
    column = heckman_two_step(design, FitOptions())
    excluded, none = column.tests["excluded_variables"], column.tests["no_selection"]
    assert isinstance(excluded, TestResult)
    assert isinstance(none, TestResult)
    assert (excluded.distribution, excluded.df) == ("chi2", (2.0,))
    (stage,) = column.stages
    at = [stage.names.index(name) for name in ("divisions_for_sale", "listed_for")]
    g, V = stage.coefficients[at], stage.covariance[np.ix_(at, at)]
    assert excluded.statistic == pytest.approx(g @ np.linalg.solve(V, g))
    assert none.statistic == pytest.approx(column.term("inverse_mills")["statistic"])
    assert "does not show" in none.caution
    assert stage.n == len(candidates(design).selected)
    assert column.fit["candidates"] == stage.n
    assert 0.5 < column.fit["auc"] < 1
    assert 0 < column.fit["delta_mean"] < 1


def test_design_without_candidates_is_refused(design: Design) -> None:
    with pytest.raises(InputProblem) as caught:
        heckman_two_step(without(design, "selection"), FitOptions())
    assert caught.value.findings[0].rule == "no_selection"


def test_exclusions_that_are_none_are_refused(design: Design) -> None:
    s = candidates(design)
    cases = {
        "unknown_exclusion": replace(s, excluded=("weather",)),
        "excluded_is_control": replace(s, excluded=("divisions_for_sale", "leverage")),
    }
    for rule, rows in cases.items():
        with pytest.raises(InputProblem) as caught:
            heckman_two_step(replace(design, selection=rows), FitOptions())
        assert caught.value.findings[0].rule == rule


def test_functional_form_alone_must_be_allowed_and_is_noted(design: Design) -> None:
    s = candidates(design)
    keep = [s.names.index(name) for name in ("constant", "leverage")]
    bare = replace(s, W=s.W[:, keep], names=("constant", "leverage"), excluded=())
    column = heckman_two_step(
        replace(design, selection=bare),
        FitOptions(allow_functional_form=True, covariance="hc1"),
    )
    assert column.fit["lambda_vif"] > 30
    notes = " ".join(column.notes)
    assert "curvature" in notes
    assert "do not lead with this column" in notes
    assert "Leung and Yu" in notes
    assert "curvature" in column.estimand
    assert "VIF" in getattr(column.tests["no_selection"], "caution", "")


def test_deals_must_match_candidates_one_to_one(design: Design) -> None:
    s = candidates(design)
    first, second = np.flatnonzero(s.selected)[:2]
    lost, twice, stray = (s.outcome_row.copy() for _ in range(3))
    lost[first] = -1
    twice[first] = twice[second]
    stray[first] = design.n
    for rows in (lost, twice, stray):
        with pytest.raises(InputProblem) as caught:
            heckman_two_step(replace(design, selection=replace(s, outcome_row=rows)), FitOptions())
        assert caught.value.findings[0].rule == "selection_rows"


def test_separated_candidates_are_refused_by_name(design: Design) -> None:
    s = candidates(design)
    W = s.W.copy()
    W[:, 4] = s.selected
    with pytest.raises(InputProblem) as caught:
        heckman_two_step(replace(design, selection=replace(s, W=W)), FitOptions())
    finding = caught.value.findings[0]
    assert (finding.rule, finding.column) == ("separation", "listed_for")


def test_notes_say_where_the_equations_differ(design: Design) -> None:
    notes = " ".join(heckman_two_step(design, FitOptions()).notes)
    assert "In the outcome but not in the selection equation: paid_in_shares" in notes
    assert "not declared as excluded: size" in notes
    assert "fixed effects (industry and year) are not in this column" in notes


def test_correlation_outside_its_range_is_said() -> None:
    design = deals()
    s = candidates(design)
    a = s.W[s.selected] @ np.array([-0.1, 0.3, -0.2, 0.8, 0.2])
    y = design.y.copy()
    y[s.outcome_row[s.selected]] = 1e-4 * y[s.outcome_row[s.selected]] + probit.mills(a) ** 3
    column = heckman_two_step(replace(design, y=y), FitOptions(covariance="hc0"))
    assert abs(column.fit["rho"]) > 1
    assert any("outside [-1, 1]" in note for note in column.notes)


def test_exact_outcome_is_withheld(design: Design) -> None:
    with pytest.raises(EstimationFailed, match="exactly"):
        heckman_two_step(replace(design, y=design.X @ np.arange(1.0, 6.0)), FitOptions())


def test_exclusion_in_the_outcome_under_another_name_is_refused(design: Design) -> None:
    """Once as it stands, once as a combination of a regressor and the constant."""
    s = candidates(design)
    for column in (design.X[:, 2], 3.0 - 2.0 * design.X[:, 2]):
        W = s.W.copy()
        W[s.selected, 3] = column[s.outcome_row[s.selected]]
        with pytest.raises(InputProblem) as caught:
            heckman_two_step(replace(design, selection=replace(s, W=W)), FitOptions())
        (finding,) = caught.value.findings
        assert (finding.rule, finding.column) == ("excluded_is_control", "divisions_for_sale")
        assert "relative_size" in finding.got


def test_exclusion_that_no_deal_differs_in_is_no_control(design: Design) -> None:
    s = candidates(design)
    W = s.W.copy()
    W[s.selected, 3] = 1.0
    W[~s.selected, 3] = np.random.default_rng(2).integers(0, 3, size=int((~s.selected).sum()))
    assert checked_selection(replace(design, selection=replace(s, W=W))) is not None
