"""Selection and instruments together: who announces, and a treatment that was chosen."""

from __future__ import annotations

from dataclasses import dataclass, replace

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
    limits,
    mills,
    probit_estimate,
)
from pipeline.estimators.sample import plain
from pipeline.estimators.selection import (
    LAMBDA,
    SecondStep,
    checked_selection,
    curvature_alone,
    equation_notes,
    excluded_test,
    stacked_influence,
)
from pipeline.estimators.stages import SAME_VARIABLE, check_names

CITATION = "Wooldridge (2010), procedure 19.2; Newey and McFadden (1994)"
SUPPORTED = ("hc0", "hc1")
EXACT = 1e-20


@dataclass(frozen=True, slots=True, eq=False)
class Columns:
    """The second step's columns, in the candidates' order of the n deals.

    Attributes:
        y: (n,) outcome.
        X: (n, k + 1) regressors, the inverse Mills ratio last.
        Z: (n, L) instruments.
        spread: (n, L + k) instruments, controls, the ratio last: regressors of the first stage.
        W: (n, q) regressors of the selection equation.
        delta: (n,) λ(λ + w'γ).
        at: the treatment's column in X.
    """

    y: Floats
    X: Floats
    Z: Floats
    spread: Floats
    W: Floats
    delta: Floats
    at: int


def selection_two_stage(design: Design, options: FitOptions) -> Estimate:
    """Probit of announcing on all A candidates, then two-stage least squares with λ on the n deals.

    λ is a regressor and its own instrument (Wooldridge 2010, procedure 19.2). With X̂ the
    first-stage fit of X = (x, D, λ), the influence of a candidate is (X̂'X̂)⁻¹(x̂u + G₂₁ψ), ψ its
    influence on the probit: both steps' errors are counted (Newey and McFadden 1994, theorem
    6.1). HC1 with A/(A - 1) by default, clustered if the candidates have clusters; ``hc0`` too.
    Read against the normal, t(G - 1) with clusters. ``robust_set`` is the Anderson-Rubin set,
    from reduced forms with the same kind of errors, while the effective F is below 104.67.

    ``fit``: sigma, least_squares (with λ, treatment not instrumented), without_selection (two
    stages without λ), partial_r_squared, candidates, selected. ``sets``: wald, anderson_rubin.
    ``tests``: effective_f, anderson_rubin (at 0), no_selection, excluded_variables. ``stages``:
    the probit.

    Raises:
        InputProblem: as :func:`~pipeline.estimators.selection.heckman_two_step`;
            ``under_identified``, ``instrument_is_treatment``, ``instrument_is_control``,
            ``instrument_collinear``.
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
    forms = _reduced_forms(columns, first, selection, rule, design.instruments)
    return _estimate(
        design,
        options,
        rule,
        step,
        positive(errors.covariance, names),
        columns,
        forms,
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


def _reduced_forms(
    columns: Columns,
    first: ProbitFit,
    selection: SelectionRows,
    rule: ErrorRule,
    names: tuple[str, ...],
) -> ReducedForms:
    """Outcome and treatment on instruments, controls and λ, with the joint stacked covariance."""
    L = columns.Z.shape[1]
    blocks, found = [], []
    for target in (columns.y, columns.X[:, columns.at]):
        b, e, bread = solve(columns.spread, target)
        step = SecondStep(columns.spread, columns.W, b, e, bread, columns.delta, 1.0, 0.0)
        blocks.append(stacked_influence(step, first, selection)[:, :L])
        found.append(b[:L])
    errors = of_influence(rule, np.column_stack(blocks), 1)
    labels = tuple(f"{of} {z}" for of in ("outcome on", "first stage") for z in names)
    df, _ = limits(rule)
    return ReducedForms(
        found[0], found[1], positive(errors.covariance, labels), _finite(df, rule), errors.floored
    )


def _finite(df: float, rule: ErrorRule) -> float:
    """The F distribution's denominator: G - 1, or the rows where the normal is meant."""
    return float(rule.n) if np.isinf(df) else df


def _estimate(
    design: Design,
    options: FitOptions,
    rule: ErrorRule,
    step: SecondStep,
    V: Floats,
    columns: Columns,
    forms: ReducedForms,
    stage: Estimate,
    selection: SelectionRows,
    notes: tuple[str, ...],
) -> Estimate:
    left, effective = _strength(design, columns, forms)
    weak = effective.statistic < strength.STRONG
    found = Found((*design.names, LAMBDA), step.coefficients, V)
    column = large_sample(design, options, rule, _labels(design, selection, rule), found)
    sets = _sets(column, forms)
    return replace(
        column,
        fit={**_facts(columns, step, left, selection), **curvature_alone(selection, options)},
        tests={
            "effective_f": effective,
            "anderson_rubin": anderson_rubin_test(forms),
            "no_selection": _no_selection(step, V, column.df),
            "excluded_variables": excluded_test(stage, selection),
        },
        stages=(stage,),
        robust_set=sets["anderson_rubin"] if weak else None,
        sets=sets,
        notes=(*notes, *_notes(design, selection, effective), *equation_notes(design, selection)),
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


def _notes(design: Design, selection: SelectionRows, effective: TestResult) -> list[str]:
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
    return notes
