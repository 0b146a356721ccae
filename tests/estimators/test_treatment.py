"""Chosen treatments: control function, likelihood, two regimes, selection with instruments."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import EstimationFailed
from pipeline.core.findings import InputProblem
from pipeline.estimators import selection_iv
from pipeline.estimators.errors import of_influence
from pipeline.estimators.probit import Equation, fit_probit, mills
from pipeline.estimators.selection import heckman_two_step, stacked_influence
from pipeline.estimators.selection_iv import selection_two_stage
from pipeline.estimators.switching import (
    ON_TREATED,
    ON_UNTREATED,
    Regime,
    average_effects,
    switching_regression,
)
from pipeline.estimators.treatment import (
    binary_treatment,
    chosen_of,
    fitted_probability_instrument,
    generalised_residual,
    treatment_two_step,
)
from pipeline.estimators.treatment_ml import treatment_likelihood
from tests.estimators.designs import EFFECT, deals, with_instruments, without

CHOSEN = (
    treatment_two_step,
    treatment_likelihood,
    switching_regression,
    fitted_probability_instrument,
)


@pytest.fixture(scope="module")
def design() -> Design:
    return without(deals(), "effects", "clusters")


def rule_of(caught: pytest.ExceptionInfo[InputProblem]) -> str:
    return caught.value.findings[0].rule


@pytest.mark.parametrize("fit", CHOSEN)
def test_refusals(fit, design: Design) -> None:  # type: ignore[no-untyped-def]
    X = design.X.copy()
    X[3, 1] = 0.5
    cases = {
        "treatment_not_binary": replace(design, X=X),
        "under_identified": replace(design, Z=np.empty((0, 0)), instruments=()),
        "instrument_is_control": replace(design, instruments=("leverage", "other")),
        "separation": replace(
            with_instruments(design, 0), Z=design.X[:, 1:2] + 0.1 * design.Z[:, 1:2]
        ),
    }
    for rule, bad in cases.items():
        with pytest.raises(InputProblem) as caught:
            fit(bad, FitOptions())
        assert rule_of(caught) == rule


@pytest.mark.parametrize("fit", CHOSEN)
def test_many_deals_come_close_to_the_truth(fit) -> None:  # type: ignore[no-untyped-def]
    column = fit(without(deals(seed=1, candidates=12_000), "effects", "clusters"), FitOptions())
    term = column.term("paid_in_shares")
    assert abs(term["coefficient"] - EFFECT) < 4 * term["std_error"]
    assert term["std_error"] < 0.005


def test_functional_form_is_said(design: Design) -> None:
    bare = replace(design, Z=np.empty((0, 0)), instruments=())
    form = FitOptions(covariance="hc1", allow_functional_form=True)
    column = treatment_two_step(bare, form)
    # Here it puts the correlation of the errors above one, and the formula gives no covariance.
    assert column.fit["rho"] > 1
    assert any("outside [-1, 1]" in note for note in column.notes)
    with pytest.raises(EstimationFailed, match="not positive"):
        treatment_two_step(bare, replace(form, covariance="auto"))
    assert any("normality alone" in note for note in column.notes)
    with pytest.raises(InputProblem) as caught:
        fitted_probability_instrument(bare, FitOptions(allow_functional_form=True))
    assert rule_of(caught) == "under_identified"


def test_generalised_residuals_average_to_the_score(design: Design) -> None:
    chosen = chosen_of(design, FitOptions())
    first = fit_probit(chosen.equation)
    h = generalised_residual(chosen.D, first.index)
    assert np.abs(chosen.equation.W.T @ h).max() < 1e-8
    assert (h[chosen.D] > 0).all()
    assert (h[~chosen.D] < 0).all()


def test_two_step_influence_by_leaving_a_deal_out(design: Design) -> None:
    """(n - 1)/n times the change is the influence, to the second order in 1/n."""
    whole = treatment_two_step(design, FitOptions(covariance="hc0"))
    assert whole.scores is not None
    changes = []
    for at in range(0, design.n, 20):
        keep = np.arange(design.n) != at
        part = replace(
            design,
            y=design.y[keep],
            X=design.X[keep],
            Z=design.Z[keep],
            rows=tuple(np.array(design.rows)[keep]),
            selection=None,
        )
        change = whole.coefficients - treatment_two_step(part, FitOptions()).coefficients
        changes.append([change[1], whole.scores[at, 1]])
    left, influence = np.array(changes).T
    assert np.corrcoef(left, influence)[0, 1] > 0.995
    np.testing.assert_allclose(left, influence, atol=0.15 * np.abs(influence).max())


def test_average_effects_add_up(design: Design) -> None:
    """ATE less the hidden parts: over all deals, ATT and ATU weigh to the mean with h."""
    column = switching_regression(design, FitOptions())
    chosen = chosen_of(design, FitOptions())
    first = fit_probit(chosen.equation)
    h = generalised_residual(chosen.D, first.index)
    share = chosen.D.mean()
    gap = column.fit["residual_treated"] - column.fit["residual_untreated"]
    together = share * column.term(ON_TREATED)["coefficient"]
    together += (1 - share) * column.term(ON_UNTREATED)["coefficient"]
    ate = column.term("paid_in_shares")["coefficient"]
    assert together == pytest.approx(ate + gap * h.mean(), abs=1e-12)
    treated, other = column.stages[1:]
    means = np.delete(design.X, 1, axis=1).mean(axis=0)
    assert ate == pytest.approx(means @ (treated.coefficients - other.coefficients)[:-1], abs=1e-12)
    assert treated.n + other.n == design.n


def test_average_effects_move_with_the_probit(design: Design) -> None:
    """The derivative through γ that the influence uses, against a small step of γ."""
    chosen = chosen_of(design, FitOptions())
    first = fit_probit(chosen.equation)
    h = generalised_residual(chosen.D, first.index)
    r = np.column_stack([chosen.controls, h])
    column = switching_regression(design, FitOptions())
    zero = np.zeros((design.n, r.shape[1]))
    arms = [Regime(part.coefficients, zero, part.n) for part in column.stages[1:]]
    step = np.zeros(chosen.equation.W.shape[1])
    step[1] = 1e-6
    moved = replace(first, index=first.index + chosen.equation.W @ step)
    nudged = np.column_stack([chosen.controls, generalised_residual(chosen.D, moved.index)])
    before, _ = average_effects(chosen, first, r, *arms)
    after, _ = average_effects(chosen, moved, nudged, *arms)
    one = np.zeros_like(first.influence)
    one[0, 1] = 1.0
    _, through = average_effects(chosen, replace(first, influence=one), r, *arms)
    _, own = average_effects(chosen, replace(first, influence=0 * one), r, *arms)
    np.testing.assert_allclose((after - before) / 1e-6, (through - own)[0], rtol=1e-4, atol=1e-10)


def test_binary_treatment(design: Design) -> None:
    D = binary_treatment(design)
    np.testing.assert_array_equal(D, design.X[:, 1] == 1)


def test_selection_with_the_treatment_as_its_instrument_is_two_step() -> None:
    """The second step with Z = D is least squares with λ: coefficients and stacked influence."""
    design = without(deals(), "effects")
    selection = design.selection
    assert selection is not None
    two = heckman_two_step(design, FitOptions(covariance="hc1"))
    equation = chosen_equation(design)
    first = fit_probit(equation)
    own = replace(design, Z=design.X[:, 1:2], instruments=("itself",))
    columns = selection_iv._columns(own, selection, first)
    step = selection_iv._second(columns)
    np.testing.assert_allclose(step.coefficients, two.coefficients, rtol=1e-9, atol=1e-13)
    rule = selection_iv.choose_errors(
        {}, len(selection.selected), FitOptions(), otherwise="hc1", supported=("hc1",)
    )
    V = of_influence(rule, stacked_influence(step, first, selection), 1).covariance
    np.testing.assert_allclose(V, two.covariance, rtol=1e-8, atol=1e-14)
    with pytest.raises(InputProblem) as caught:
        selection_two_stage(own, FitOptions())
    assert rule_of(caught) == "instrument_is_treatment"


def chosen_equation(design: Design) -> Equation:
    s = design.selection
    assert s is not None
    return Equation(s.selected, s.W, s.names, "announcing a deal", s.excluded[0])


def test_selection_with_instruments_solves_its_moments() -> None:
    design = without(deals(), "effects")
    column = selection_two_stage(design, FitOptions(covariance="hc1"))
    selection = design.selection
    assert selection is not None
    rows = selection.outcome_row[selection.selected]
    ratio = mills(selection.W[selection.selected] @ column.stages[0].coefficients)
    X = np.column_stack([design.X[rows], ratio])
    Z = np.column_stack([np.delete(design.X[rows], 1, axis=1), ratio, design.Z[rows]])
    # Two-stage least squares in its textbook form (Wooldridge 2010, eq. 5.32).
    P = Z @ np.linalg.solve(Z.T @ Z, Z.T)
    b = np.linalg.solve(X.T @ P @ X, X.T @ P @ design.y[rows])
    np.testing.assert_allclose(column.coefficients, b, rtol=1e-8, atol=1e-12)
    assert any("leaves out treasury_shares" in note for note in column.notes)


def test_anderson_rubin_with_selection_agrees_with_its_test() -> None:
    design = without(deals(), "effects")
    found = selection_two_stage(design, FitOptions(covariance="hc1"))
    test = found.tests["anderson_rubin"]
    assert found.sets["anderson_rubin"].covers(0.0) == (test.p_value > 0.05)  # type: ignore[union-attr]
    assert found.robust_set == found.sets["anderson_rubin"]
