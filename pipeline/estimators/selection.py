"""Heckman's two steps: who announces, then what the announcement was worth."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from pipeline.core.design import Design, FitOptions, SelectionRows
from pipeline.core.estimate import Estimate, EstimationFailed, Tested, t_test, z_test
from pipeline.core.prices import Floats
from pipeline.estimators import diagnostics
from pipeline.estimators.algebra import refuse_dependent, solve
from pipeline.estimators.errors import (
    CLUSTER,
    ErrorRule,
    cautions,
    choose_errors,
    of_influence,
    positive,
    words,
)
from pipeline.estimators.probit import (
    Equation,
    ProbitFit,
    fit_probit,
    limits,
    mills,
    probit_estimate,
)
from pipeline.estimators.sample import plain
from pipeline.estimators.selection_rows import checked_selection

LAMBDA = "inverse_mills"
CITATION = "Heckman (1979); Greene (1981)"
VIF_DOUBTFUL, VIF_HOPELESS = 10.0, 30.0
CONDITION_DOUBTFUL = 20.0


@dataclass(frozen=True, slots=True, eq=False)
class SecondStep:
    """The outcome equation of the n selected rows.

    Attributes:
        X: (n, k + 1) regressors, the inverse Mills ratio last.
        W: (n, q) the same rows of the selection equation.
        coefficients: (k + 1,).
        residuals: (n,).
        bread: (k + 1, k + 1).
        delta: (n,) λ(λ + w'γ), in (0, 1).
        sigma: standard deviation of the outcome's error among all candidates.
        rho: its correlation with the selection error; may exceed one.
    """

    X: Floats
    W: Floats
    coefficients: Floats
    residuals: Floats
    bread: Floats
    delta: Floats
    sigma: float
    rho: float


def heckman_two_step(design: Design, options: FitOptions) -> Estimate:
    """Probit of announcing on all A candidates, then least squares with λ = φ/Φ on the n deals.

    β_λ = ρσ; δ = λ(λ + w'γ); σ² = e'e/n + β_λ² mean(δ); covariance σ²(X*'X*)⁻¹[X*'(I - ρ²Δ)X* + Q]
    (X*'X*)⁻¹ with Q = ρ² X*'ΔW V_γ W'ΔX* (Heckman 1979; Greene 1981), read against the normal.
    It takes the errors to be normal with equal variances; ``hc0``, ``hc1`` or ``cluster`` give
    the sandwich of the stacked moments of both steps instead (Newey and McFadden 1994, sec. 6).
    ``n`` counts deals; the coefficient of λ is named ``inverse_mills``.

    ``fit``: sigma, rho, delta_mean, lambda_vif, condition_number, condition_number_without_lambda,
    pseudo_r_squared, auc, candidates, selected, without_lambda (the treatment's coefficient by
    least squares alone).
    Without an excluded variable the column is identified by curvature alone, and says so;
    ``curvature_alone`` is then 1 unless the options allow it.
    ``tests``: excluded_variables, no_selection. ``stages``: the probit.

    Raises:
        InputProblem: ``no_selection``, ``selection_rows``, ``excluded_is_control``,
            ``unknown_exclusion``,
            ``separation``, ``one_outcome``, ``few_rows``, ``collinear``, ``no_variation``, or a
            problem of clusters or covariance.
        EstimationFailed: if the probit does not converge or the covariance is not positive.
    """
    selection = checked_selection(design)
    rule = choose_errors(
        selection.clusters,
        len(selection.selected),
        options,
        otherwise="classical",
        supported=("classical", "hc0", "hc1"),
    )
    notes = plain(design, rule).notes
    key = (*selection.excluded, *selection.names[::-1])[0]
    equation = Equation(selection.selected, selection.W, selection.names, "announcing a deal", key)
    first = fit_probit(equation)
    names = (*design.names, LAMBDA)
    step = second_step(design, selection, first, names)
    V, floored = _covariance(step, first, selection, rule)
    stage = probit_estimate(first, equation, rule, options)
    return _estimate(
        design,
        options,
        rule,
        step,
        positive(V, names),
        stage,
        selection,
        (*notes, *cautions(rule, floored)),
    )


def second_step(
    design: Design, selection: SelectionRows, first: ProbitFit, names: tuple[str, ...]
) -> SecondStep:
    """Least squares of the outcome on X and λ, and the moments of its error (Heckman 1979).

    ``names`` are those of X and of λ, k + 1 of them. σ² = e'e/n + β_λ² mean(δ), outcome units.

    Raises:
        InputProblem: ``collinear`` or ``few_rows``.
        EstimationFailed: if the regressors fit the outcome exactly.
    """
    chosen = selection.selected
    rows = selection.outcome_row[chosen]
    index = first.index[chosen]
    ratio = mills(index)
    X = np.column_stack([design.X[rows], ratio])
    refuse_dependent(X, names)
    b, e, bread = solve(X, design.y[rows])
    delta = ratio * (ratio + index)
    sigma = float(np.sqrt(np.mean(e**2) + b[-1] ** 2 * np.mean(delta)))
    if not sigma > 1e-10 * float(np.std(design.y)):
        raise EstimationFailed("the regressors fit the outcome exactly: no error is left")
    return SecondStep(X, selection.W[chosen], b, e, bread, delta, sigma, float(b[-1]) / sigma)


def _covariance(
    step: SecondStep, first: ProbitFit, selection: SelectionRows, rule: ErrorRule
) -> tuple[Floats, bool]:
    if rule.kind != "classical":
        errors = of_influence(rule, stacked_influence(step, first, selection), 1)
        return errors.covariance, errors.floored
    return corrected_covariance(step, first.information), False


def corrected_covariance(step: SecondStep, information: Floats) -> Floats:
    """(k + 1, k + 1) covariance that counts the first step's error (Greene 1981).

    ``information`` (q, q) is the probit's covariance.

    Raises:
        EstimationFailed: if it is not positive semi-definite, as |ρ| > 1 may bring about.
    """
    X, delta, square = step.X, step.delta, step.rho**2
    cross = X.T @ (delta[:, None] * step.W)
    inner = X.T @ ((1 - square * delta)[:, None] * X) + square * cross @ information @ cross.T
    V = step.sigma**2 * step.bread @ inner @ step.bread
    scale = np.sqrt(np.abs(np.diag(V)))
    if np.linalg.eigvalsh(V / np.outer(scale, scale))[0] < -1e-8:
        raise EstimationFailed(
            "the two-step covariance is not positive: the implied correlation of the errors is "
            f"{step.rho:.2f}; robust errors (hc1) do without that formula"
        )
    return np.asarray(V)


def stacked_influence(step: SecondStep, first: ProbitFit, selection: SelectionRows) -> Floats:
    """(A, k + 1) influence of every candidate on the outcome coefficients, through both steps.

    (X*'X*)⁻¹(x*_i e_i + G₂₁ψ_i), ψ_i (q,) the candidate's influence on γ and G₂₁ (k + 1, q) the
    derivative of the second step's moments by γ: Σ x*β_λδw', and in λ's row less Σ eδw'
    (Newey and McFadden 1994, theorem 6.1).
    """
    weighted = step.delta[:, None] * step.W
    derivative = step.coefficients[-1] * step.X.T @ weighted
    derivative[-1] -= step.residuals @ weighted
    moments = first.influence @ derivative.T
    moments[selection.selected] += step.X * step.residuals[:, None]
    return np.asarray(moments @ step.bread)


def _estimate(
    design: Design,
    options: FitOptions,
    rule: ErrorRule,
    step: SecondStep,
    V: Floats,
    stage: Estimate,
    selection: SelectionRows,
    notes: tuple[str, ...],
) -> Estimate:
    df, sentence = limits(rule)
    facts = {**_facts(design, step, stage, selection), **curvature_alone(selection, options)}
    return Estimate(
        estimator="heckman_two_step",
        title="Heckman two-step",
        estimand=estimand(design, selection),
        names=(*design.names, LAMBDA),
        coefficients=step.coefficients,
        covariance=V,
        df=df,
        df_rule=sentence,
        covariance_name="two-step, counting the error of the selection equation"
        if rule.kind == "classical"
        else f"stacked moments of both steps, {words(rule)}",
        n=design.n,
        treatment=design.treatment,
        outcome=design.outcome,
        clusters=rule.counts,
        fit=facts,
        tests={
            "excluded_variables": excluded_test(stage, selection),
            "no_selection": _no_selection(step, V, df, facts["lambda_vif"]),
        },
        stages=(stage,),
        notes=(*notes, *_notes(design, step, selection, facts)),
        citation=CITATION if rule.kind != CLUSTER else f"{CITATION}; Newey and McFadden (1994)",
        level=options.level,
    )


def estimand(design: Design, selection: SelectionRows) -> str:
    """What a selection model of the design estimates, for whom and under which assumptions."""
    identified = (
        f"the exclusion of {', '.join(selection.excluded)} from the outcome"
        if selection.excluded
        else "the curvature of the inverse Mills ratio alone"
    )
    return (
        f"difference in mean {design.outcome} associated with {design.treatment} among all "
        "candidates, announced or not, holding the controls fixed, after modelling who announces "
        f"under joint normality and {identified}"
    )


def _facts(
    design: Design, step: SecondStep, stage: Estimate, selection: SelectionRows
) -> dict[str, float]:
    alone = solve(design.X, design.y)[0]
    return {
        "sigma": step.sigma,
        "rho": step.rho,
        "delta_mean": float(step.delta.mean()),
        "lambda_vif": diagnostics.variance_inflation(step.X, step.X.shape[1] - 1),
        "condition_number": diagnostics.condition_number(step.X),
        "condition_number_without_lambda": diagnostics.condition_number(design.X),
        "pseudo_r_squared": stage.fit["pseudo_r_squared"],
        "auc": stage.fit["auc"],
        "candidates": float(len(selection.selected)),
        "selected": float(selection.selected.sum()),
        "without_lambda": float(alone[design.names.index(design.treatment)]),
    }


def curvature_alone(selection: SelectionRows, options: FitOptions) -> dict[str, float]:
    """The fact that nothing but curvature identifies the model, unless the options allow it."""
    if selection.excluded or options.allow_functional_form:
        return {}
    return {"curvature_alone": 1.0}


def excluded_test(stage: Estimate, selection: SelectionRows) -> Tested:
    """Wald test that no excluded variable moves announcing; ``stage`` is the probit (Wald 1943)."""
    at = [selection.names.index(name) for name in selection.excluded]
    return diagnostics.wald(
        "Excluded variables in the selection equation",
        "the excluded variables do not move announcing",
        stage.coefficients[at],
        stage.covariance[np.ix_(at, at)],
        stage.df,
        "Wald (1943)",
    )


def _no_selection(step: SecondStep, V: Floats, df: float, inflation: float) -> Tested:
    name, null = "Coefficient of the inverse Mills ratio", "no selection on unobservables"
    statistic = float(step.coefficients[-1] / np.sqrt(V[-1, -1]))
    caution = "a large p does not show that there is no selection"
    if inflation > VIF_DOUBTFUL:
        caution += f"; the ratio is nearly a combination of the regressors (VIF {inflation:.0f})"
    if np.isinf(df):
        return z_test(name, null, statistic, caution=caution, citation=CITATION)
    return t_test(name, null, statistic, df, caution=caution, citation=CITATION)


def _notes(
    design: Design, step: SecondStep, selection: SelectionRows, facts: dict[str, float]
) -> list[str]:
    notes = []
    if facts["lambda_vif"] > VIF_HOPELESS:
        notes.append(
            f"The inverse Mills ratio is all but a combination of the regressors (VIF "
            f"{facts['lambda_vif']:.0f}, above 30): do not lead with this column."
        )
    elif facts["lambda_vif"] > VIF_DOUBTFUL:
        notes.append(
            f"The inverse Mills ratio is close to a combination of the regressors (VIF "
            f"{facts['lambda_vif']:.0f}, above 10)."
        )
    if facts["condition_number"] > CONDITION_DOUBTFUL:
        notes.append(
            f"Condition number {facts['condition_number']:.0f} with the inverse Mills ratio, "
            f"{facts['condition_number_without_lambda']:.0f} without it: above 20, two-step "
            "estimates tend to be unstable (Leung and Yu 1996)."
        )
    if abs(step.rho) > 1:
        notes.append(
            f"The implied correlation of the errors is {step.rho:.2f}, outside [-1, 1]: "
            "the model and the data disagree."
        )
    return notes + equation_notes(design, selection)


def equation_notes(design: Design, selection: SelectionRows) -> list[str]:
    """Where the two equations differ beyond the declared exclusions."""
    constant = np.ptp(design.X, axis=0) == 0
    missing = [
        name
        for name, fixed in zip(design.names, constant, strict=True)
        if name not in selection.names and not fixed
    ]
    varies = np.ptp(selection.W, axis=0) > 0
    undeclared = [
        name
        for name, moves in zip(selection.names, varies, strict=True)
        if moves and name not in design.names and name not in selection.excluded
    ]
    notes = []
    if not selection.excluded:
        notes.append(
            "No variable moves announcing without moving the outcome: the correction rests on the "
            "curvature of the inverse Mills ratio, that is on normality."
        )
    if missing:
        notes.append(
            f"In the outcome but not in the selection equation: {', '.join(missing)}. They are "
            "taken to matter for the return and not for announcing."
        )
    if undeclared:
        notes.append(
            f"In the selection equation but not in the outcome, though not declared as excluded: "
            f"{', '.join(undeclared)}. They identify the correction as excluded variables do."
        )
    return notes
