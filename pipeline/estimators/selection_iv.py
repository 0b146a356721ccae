"""Selection and instruments together: who announces, and a treatment that was chosen."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from pipeline.core.design import Design, FitOptions, SelectionRows
from pipeline.core.estimate import (
    ConfidenceSet,
    Estimate,
    EstimationFailed,
    Shape,
    Tested,
    TestResult,
    t_test,
    z_test,
)
from pipeline.core.prices import Floats
from pipeline.estimators import diagnostics
from pipeline.estimators import effective_f as strength
from pipeline.estimators.algebra import partial_out, refusal, refuse_dependent, solve
from pipeline.estimators.anderson_rubin import (
    ReducedForms,
    anderson_rubin_set,
    anderson_rubin_test,
)
from pipeline.estimators.column import Found, Labels, large_sample
from pipeline.estimators.errors import (
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
    mills,
    probit_estimate,
)
from pipeline.estimators.sample import plain
from pipeline.estimators.selection import (
    LAMBDA,
    SecondStep,
    curvature_alone,
    equation_notes,
    excluded_test,
    stacked_influence,
)
from pipeline.estimators.selection_forms import Columns, inverted_forms, reduced_forms
from pipeline.estimators.selection_rows import checked_selection
from pipeline.estimators.stages import SAME_VARIABLE, check_names

CITATION = "Wooldridge (2010), procedure 19.2; Newey and McFadden (1994)"
SUPPORTED = ("hc0", "hc1")
EXACT = 1e-20


def selection_two_stage(design: Design, options: FitOptions) -> Estimate:
    """Probit of announcing on all A candidates, then two-stage least squares with λ on the n deals.

    λ is a regressor and its own instrument (Wooldridge 2010, procedure 19.2). With X̂ the
    first-stage fit of X = (x, D, λ), the influence of a candidate is (X̂'X̂)⁻¹(x̂u + G₂₁ψ), ψ its
    influence on the probit: both steps' errors are counted (Newey and McFadden 1994, theorem
    6.1). HC1 with A/(A - 1) by default, clustered if the candidates have clusters; ``hc0`` too.
    Read against the normal, t(G - 1) with clusters. ``robust_set`` is the Anderson-Rubin set, by
    :func:`~pipeline.estimators.selection_forms.inverted_forms`, while the effective F is below
    104.67 or that set is unbounded. The treatment alone may be endogenous.

    ``fit``: sigma, least_squares (with λ, treatment not instrumented), without_selection (two
    stages without λ), partial_r_squared, candidates, selected. ``sets``: wald, anderson_rubin.
    ``tests``: effective_f, anderson_rubin (at 0), no_selection, excluded_variables. ``stages``:
    the probit.

    Raises:
        InputProblem: as :func:`~pipeline.estimators.selection.heckman_two_step`;
            ``under_identified``, ``instrument_is_treatment``, ``instrument_is_control``,
            ``instrument_collinear``, ``one_endogenous``, ``cluster_decides``.
        EstimationFailed: if the probit does not converge, the fit is exact or a variance is not
            positive.
    """
    selection = checked_selection(design)
    rule = choose_errors(
        selection.clusters,
        len(selection.selected),
        options,
        otherwise="hc1",
        cluster_by_default=True,
        supported=SUPPORTED,
    )
    notes = plain(design, rule).notes
    refuse_dependent(design.X, design.names)
    _check_instruments(design)
    key = (*selection.excluded, *selection.names[::-1])[0]
    equation = Equation(selection.selected, selection.W, selection.names, "announcing a deal", key)
    first = fit_probit(equation)
    columns = _columns(design, selection, first)
    names = (*design.names, LAMBDA)
    _check_rank(design, columns)
    step = _second(columns)
    errors = of_influence(rule, stacked_influence(step, first, selection), 1)
    stage = probit_estimate(first, equation, rule, options)
    forms = reduced_forms(columns, first, selection, rule, design.instruments)
    tested = inverted_forms(columns, first, selection, rule, design.instruments)
    return _estimate(
        design,
        options,
        rule,
        step,
        positive(errors.covariance, names),
        columns,
        (forms, tested),
        stage,
        selection,
        (*notes, *cautions(rule, errors.floored or forms.repaired)),
    )


def _check_instruments(design: Design) -> None:
    if not design.instruments:
        raise refusal(
            "under_identified",
            "instruments",
            f"no instrument for {design.treatment}",
            "at least one",
            "declare an instrument or use the selection model alone",
        )
    if design.also_endogenous:
        listed = ", ".join(design.also_endogenous)
        raise refusal(
            "one_endogenous",
            listed,
            f"{listed} to be instrumented beside {design.treatment}",
            f"{design.treatment} alone",
            "this estimator instruments one variable: leave its column out, or instrument "
            f"{design.treatment} alone",
        )
    check_names(design)


def _columns(design: Design, selection: SelectionRows, first: ProbitFit) -> Columns:
    rows = selection.outcome_row[selection.selected]
    index = first.index[selection.selected]
    ratio = mills(index)
    x, Z = design.X[rows], design.Z[rows]
    at = design.names.index(design.treatment)
    return Columns(
        y=design.y[rows],
        X=np.column_stack([x, ratio]),
        Z=Z,
        spread=np.column_stack([Z, np.delete(x, at, axis=1), ratio]),
        W=selection.W[selection.selected],
        delta=ratio * (ratio + index),
        at=at,
    )


def _check_rank(design: Design, columns: Columns) -> None:
    refuse_dependent(columns.X, (*design.names, LAMBDA))
    controls = tuple(name for name in design.names if name != design.treatment)
    refuse_dependent(
        columns.spread, (*design.instruments, *controls, LAMBDA), "instrument_collinear"
    )
    left = partial_out(
        np.column_stack([columns.X[:, columns.at], columns.Z]),
        columns.spread[:, len(design.instruments) :],
    )
    noise = solve(left[:, 1:], left[:, 0])[1]
    if float(noise @ noise) < (1 - SAME_VARIABLE) * float(left[:, 0] @ left[:, 0]):
        raise refusal(
            "instrument_is_treatment",
            ", ".join(design.instruments),
            f"the instruments reproduce {design.treatment} (partial R² above {SAME_VARIABLE})",
            "instruments that move the treatment without being it",
            "an instrument that is the treatment under another name removes no bias: replace it",
        )


def _second(columns: Columns) -> SecondStep:
    predicted = columns.X.copy()
    predicted[:, columns.at] -= solve(columns.spread, columns.X[:, columns.at])[1]
    b, _, bread = solve(predicted, columns.y)
    u = columns.y - columns.X @ b
    if float(u @ u) <= EXACT * float(np.sum((columns.y - columns.y.mean()) ** 2)):
        raise EstimationFailed("the regressors fit the outcome exactly: no error is left")
    sigma = float(np.sqrt(np.mean(u**2) + b[-1] ** 2 * np.mean(columns.delta)))
    return SecondStep(predicted, columns.W, b, u, bread, columns.delta, sigma, float(b[-1]) / sigma)


def _estimate(
    design: Design,
    options: FitOptions,
    rule: ErrorRule,
    step: SecondStep,
    V: Floats,
    columns: Columns,
    forms: tuple[ReducedForms, ReducedForms],
    stage: Estimate,
    selection: SelectionRows,
    notes: tuple[str, ...],
) -> Estimate:
    """``forms``: those the effective F is made of, and those the Anderson-Rubin test is."""
    left, effective = _strength(design, columns, forms[0])
    found = Found((*design.names, LAMBDA), step.coefficients, V)
    column = large_sample(design, options, rule, _labels(design, selection, rule), found)
    sets = _sets(column, forms[1])
    robust = sets["anderson_rubin"]
    unbounded = robust.shape in (Shape.RAYS, Shape.LINE)
    weak = unbounded or effective.statistic < strength.STRONG
    return replace(
        column,
        fit={**_facts(columns, step, left, selection), **curvature_alone(selection, options)},
        tests={
            "effective_f": effective,
            "anderson_rubin": anderson_rubin_test(forms[1]),
            "no_selection": _no_selection(step, V, column.df),
            "excluded_variables": excluded_test(stage, selection),
        },
        stages=(stage,),
        robust_set=robust if weak else None,
        sets=sets,
        notes=(
            *notes,
            *_notes(design, selection, effective, unbounded=unbounded),
            *equation_notes(design, selection),
        ),
    )


def _strength(design: Design, columns: Columns, forms: ReducedForms) -> tuple[Floats, TestResult]:
    """Treatment and instruments (n, 1 + L) with controls and λ taken out, and the effective F."""
    L = len(design.instruments)
    both = np.column_stack([columns.X[:, columns.at], columns.Z])
    left = partial_out(both, columns.spread[:, L:])
    D, Z = left[:, 0], left[:, 1:]
    return left, strength.effective_f(D, Z, forms.treatment, forms.covariance[L:, L:])


def _labels(design: Design, selection: SelectionRows, rule: ErrorRule) -> Labels:
    return Labels(
        estimator="selection_two_stage",
        title="Selection and instruments",
        estimand=_estimand(design, selection),
        claim="has, under exclusion, an estimated effect of",
        covariance=f"stacked moments of both steps, {words(rule)}",
        citation=CITATION,
    )


def _estimand(design: Design, selection: SelectionRows) -> str:
    moved = " and ".join(design.instruments)
    excluded = " and ".join(selection.excluded) or "the curvature of the inverse Mills ratio alone"
    return (
        f"effect of {design.treatment} on {design.outcome} among all candidates, announced or "
        f"not, if {moved} reach the outcome through {design.treatment} alone, the errors of "
        f"announcing and outcome are jointly normal, and {excluded} identifies who announces"
    )


def _sets(column: Estimate, forms: ReducedForms) -> dict[str, ConfidenceSet]:
    term = column.term(column.treatment)
    return {
        "wald": ConfidenceSet(
            Shape.INTERVAL, term["ci_low"], term["ci_high"], column.level, column.df_rule
        ),
        "anderson_rubin": anderson_rubin_set(forms, column.level),
    }


def _facts(
    columns: Columns, step: SecondStep, left: Floats, selection: SelectionRows
) -> dict[str, float]:
    D, at = left[:, 0], columns.at
    noise = solve(left[:, 1:], D)[1]
    predicted = columns.X[:, :-1].copy()
    predicted[:, at] -= solve(columns.spread[:, :-1], columns.X[:, at])[1]
    return {
        "sigma": step.sigma,
        "least_squares": float(solve(columns.X, columns.y)[0][at]),
        "without_selection": float(solve(predicted, columns.y)[0][at]),
        "partial_r_squared": 1 - float(noise @ noise) / float(D @ D),
        "lambda_vif": diagnostics.variance_inflation(columns.X, columns.X.shape[1] - 1),
        "candidates": float(len(selection.selected)),
        "selected": float(selection.selected.sum()),
    }


def _no_selection(step: SecondStep, V: Floats, df: float) -> Tested:
    name, null = "Coefficient of the inverse Mills ratio", "no selection on unobservables"
    statistic = float(step.coefficients[-1] / np.sqrt(V[-1, -1]))
    caution = "a large p does not show that there is no selection"
    if np.isinf(df):
        return z_test(name, null, statistic, caution=caution, citation=CITATION)
    return t_test(name, null, statistic, df, caution=caution, citation=CITATION)


def _notes(
    design: Design, selection: SelectionRows, effective: TestResult, *, unbounded: bool
) -> list[str]:
    notes = []
    missing = [name for name in design.instruments if name not in selection.names]
    if missing:
        notes.append(
            f"The selection equation leaves out {', '.join(missing)}: the instruments are taken "
            "not to move who announces. If they do, add them for all candidates."
        )
    if effective.statistic < strength.STRONG:
        notes.append(
            f"Effective F {effective.statistic:.1f}, below {strength.STRONG}: the interval shown "
            "is the Anderson-Rubin set."
        )
    if unbounded:
        notes.append("The data do not bound the effect: the Anderson-Rubin set is unbounded.")
    return notes
