"""A treatment that was chosen: the equation of the choice, and two ways to use it."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy import special

from pipeline.core.design import Design, FitOptions, SelectionRows
from pipeline.core.estimate import Estimate, EstimationFailed, Tested, t_test, z_test
from pipeline.core.prices import Booleans, Floats
from pipeline.estimators import diagnostics
from pipeline.estimators.algebra import refusal, refuse_dependent, solve
from pipeline.estimators.balance import overlap
from pipeline.estimators.column import Found, Labels, large_sample
from pipeline.estimators.errors import (
    ErrorRule,
    cautions,
    choose_errors,
    of_influence,
    positive,
    words,
)
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.likelihood_report import multiplier
from pipeline.estimators.probit import (
    Equation,
    ProbitFit,
    fit_probit,
    mills,
    probit_estimate,
)
from pipeline.estimators.sample import plain
from pipeline.estimators.selection import SecondStep, corrected_covariance, stacked_influence
from pipeline.estimators.stages import check_names

RESIDUAL = "generalised_residual"
FITTED = "fitted_probability"
CITATION = "Heckman (1978); Maddala (1983), sec. 5.7; Wooldridge (2010), sec. 21.4.2"
SUPPORTED = ("classical", "hc0", "hc1")
EXACT = 1e-10


@dataclass(frozen=True, slots=True, eq=False)
class Chosen:
    """Who chose the treatment, and what explains it.

    Attributes:
        D: (n,) whether the deal has the treatment.
        controls: (n, k - 1) regressors of the outcome without the treatment.
        control_names: their names.
        equation: the probit's rows: controls and instruments.
        rows: the same as selection rows, every deal's outcome seen.
    """

    D: Booleans
    controls: Floats
    control_names: tuple[str, ...]
    equation: Equation
    rows: SelectionRows


def binary_treatment(design: Design) -> Booleans:
    """(n,) whether each deal has the treatment.

    Raises:
        InputProblem: ``treatment_not_binary``.
    """
    column = design.X[:, design.names.index(design.treatment)]
    values = np.unique(column)
    if values.tolist() != [0.0, 1.0]:
        raise refusal(
            "treatment_not_binary",
            design.treatment,
            f"{len(values)} values from {values[0]:g} to {values[-1]:g}",
            "0 and 1",
            "state the feature as yes or no, or use an estimator for a measured one",
        )
    return np.asarray(column == 1.0, dtype=np.bool_)


def chosen_of(design: Design, options: FitOptions) -> Chosen:
    """The equation of the choice: a probit of the treatment on controls and instruments.

    Raises:
        InputProblem: ``collinear``, ``few_rows``, ``treatment_not_binary``, ``under_identified``
            (no instrument, unless the options allow the functional form),
            ``instrument_is_treatment``, ``instrument_is_control``.
    """
    refuse_dependent(design.X, design.names)
    D = binary_treatment(design)
    if not design.instruments and not options.allow_functional_form:
        raise refusal(
            "under_identified",
            "instruments",
            f"no variable moves {design.treatment} alone",
            "at least one instrument",
            "name one and say why it does not move the outcome, or set allow_functional_form",
        )
    check_names(design)
    at = design.names.index(design.treatment)
    controls = np.delete(design.X, at, axis=1)
    control_names = tuple(name for name in design.names if name != design.treatment)
    Z = design.Z if design.instruments else np.empty((design.n, 0))
    W, names = np.column_stack([controls, Z]), (*control_names, *design.instruments)
    equation = Equation(D, W, names, design.treatment, (*design.instruments, *names[::-1])[0])
    every = np.ones(design.n, dtype=np.bool_)
    rows = SelectionRows(
        W, names, design.instruments, every, np.arange(design.n), dict(design.clusters)
    )
    return Chosen(D, controls, control_names, equation, rows)


def generalised_residual(D: Booleans, index: Floats) -> Floats:
    """(n,) φ/Φ of the index for the treated, -φ/(1 - Φ) for the others.

    E[v | D, w] of the choice's error v (Gourieroux, Monfort, Renault and Trognon 1987).
    """
    signs = np.where(D, 1.0, -1.0)
    return np.asarray(signs * mills(signs * index))


def treatment_two_step(design: Design, options: FitOptions) -> Estimate:
    """Probit of the treatment, then least squares with its generalised residual h, all n deals.

    δ = h(h + w'γ) and σ, ρ and the covariance as in Heckman's two steps, over all rows (Maddala
    1983, sec. 5.7; Wooldridge 2010, sec. 21.4.2); ``hc0``, ``hc1`` or ``cluster`` give the
    sandwich of the stacked moments of both steps. Read against the normal, t(G - 1) with
    clusters. The coefficient of h is named ``generalised_residual``.

    ``fit``: sigma, rho, delta_mean, residual_vif, least_squares, treated, small_sample_factor and
    the facts of :func:`~pipeline.estimators.balance.overlap`. ``tests``: exogeneity,
    excluded_variables. ``stages``: the probit.

    Raises:
        InputProblem: see :func:`chosen_of`; ``separation``, ``no_variation`` or a problem of
            clusters or covariance.
        EstimationFailed: if the probit does not converge or the covariance is not positive.
    """
    rule = choose_errors(
        design.clusters, design.n, options, otherwise="classical", supported=SUPPORTED
    )
    notes = plain(design, rule).notes
    chosen = chosen_of(design, options)
    first = fit_probit(chosen.equation)
    names = (*design.names, RESIDUAL)
    step = control_function(design, chosen, first)
    V, influence, floored = _covariance(step, first, chosen, rule)
    V = positive(V, names)
    stage = probit_estimate(first, chosen.equation, rule, options)
    facts, warned = overlap(np.asarray(special.ndtr(first.index)), chosen.D)
    column = large_sample(
        design, options, rule, _labels(design, rule), Found(names, step.coefficients, V)
    )
    return replace(
        column,
        fit={**_facts(design, step, chosen), **facts, **multiplier(rule)},
        tests={
            "exogeneity": _exogeneity(step, V, column.df),
            "excluded_variables": excluded_from_outcome(design, stage),
        },
        stages=(stage,),
        scores=influence,
        notes=(*notes, *cautions(rule, floored), *warned, *_notes(design, step)),
    )


def _labels(design: Design, rule: ErrorRule) -> Labels:
    return Labels(
        estimator="treatment_two_step",
        title="Control function",
        estimand=joint_estimand(design),
        covariance="two-step, counting the error of the treatment equation"
        if rule.kind == "classical"
        else f"stacked moments of both steps, {words(rule)}",
        citation=CITATION,
    )


def joint_estimand(design: Design) -> str:
    """What the two-step and the likelihood estimate."""
    identified = (
        f"{' and '.join(design.instruments)} moving the choice and not the outcome"
        if design.instruments
        else "the curvature of the normal distribution alone"
    )
    return (
        f"effect of {design.treatment} on {design.outcome}, taken to be the same for all deals "
        f"(ATE = ATT), under joint normality of the errors and {identified}"
    )


def excluded_from_outcome(design: Design, stage: Estimate) -> Tested:
    """Wald test that the instruments do not move the choice, from its equation."""
    at = [stage.names.index(name) for name in design.instruments]
    return diagnostics.wald(
        "Instruments in the treatment equation",
        "the instruments do not move the treatment",
        stage.coefficients[at],
        stage.covariance[np.ix_(at, at)],
        stage.df,
        "Wald (1943)",
    )


def control_function(design: Design, chosen: Chosen, first: ProbitFit) -> SecondStep:
    """Least squares of the outcome on the regressors and h, the residual last; all n rows.

    Raises:
        InputProblem: ``collinear``.
        EstimationFailed: if the fit is exact.
    """
    h = generalised_residual(chosen.D, first.index)
    X = np.column_stack([design.X, h])
    refuse_dependent(X, (*design.names, RESIDUAL))
    b, e, bread = solve(X, design.y)
    delta = h * (h + first.index)
    sigma = float(np.sqrt(np.mean(e**2) + b[-1] ** 2 * np.mean(delta)))
    if not sigma > EXACT * float(np.std(design.y)):
        raise EstimationFailed("the regressors fit the outcome exactly: no error is left")
    return SecondStep(
        X, chosen.equation.W, b, e, bread, np.asarray(delta), sigma, float(b[-1]) / sigma
    )


def _covariance(
    step: SecondStep, first: ProbitFit, chosen: Chosen, rule: ErrorRule
) -> tuple[Floats, Floats, bool]:
    influence = stacked_influence(step, first, chosen.rows)
    if rule.kind == "classical":
        return corrected_covariance(step, first.information), influence, False
    errors = of_influence(rule, influence, 1)
    return errors.covariance, influence, errors.floored


def _facts(design: Design, step: SecondStep, chosen: Chosen) -> dict[str, float]:
    alone = solve(design.X, design.y)[0]
    return {
        "sigma": step.sigma,
        "rho": step.rho,
        "delta_mean": float(step.delta.mean()),
        "residual_vif": diagnostics.variance_inflation(step.X, step.X.shape[1] - 1),
        "least_squares": float(alone[design.names.index(design.treatment)]),
        "treated": float(chosen.D.sum()),
    }


def _exogeneity(step: SecondStep, V: Floats, df: float) -> Tested:
    name, null = "Coefficient of the generalised residual", "the treatment is exogenous"
    statistic = float(step.coefficients[-1] / np.sqrt(V[-1, -1]))
    caution = "a large p does not show that the treatment is exogenous"
    if np.isinf(df):
        return z_test(name, null, statistic, caution=caution, citation=CITATION)
    return t_test(name, null, statistic, df, caution=caution, citation=CITATION)


def _notes(design: Design, step: SecondStep) -> list[str]:
    notes = []
    if not design.instruments:
        notes.append(
            "No variable moves the choice without moving the outcome: the correction rests on "
            "normality alone."
        )
    if abs(step.rho) > 1:
        notes.append(
            f"The implied correlation of the errors is {step.rho:.2f}, outside [-1, 1]: "
            "the model and the data disagree."
        )
    return notes


def fitted_probability_instrument(design: Design, options: FitOptions) -> Estimate:
    """Two-stage least squares with the probit's fitted probability as the only instrument.

    Wooldridge (2010), procedure 21.1: consistent even where the probit is wrong, as long as the
    instruments do not enter the outcome, and the estimated probability leaves the usual errors
    valid. The probability never stands in for the treatment. Everything else is
    :func:`~pipeline.estimators.instruments.two_stage_least_squares`; the probit is the last stage.

    Raises:
        InputProblem: as there and in :func:`chosen_of`; ``separation``.
        EstimationFailed: if the probit does not converge, or as there.
    """
    rule = choose_errors(
        design.clusters,
        design.n,
        options,
        otherwise="hc1",
        cluster_by_default=True,
        supported=SUPPORTED,
    )
    plain(design, rule)
    chosen = chosen_of(design, replace(options, allow_functional_form=False))
    first = fit_probit(chosen.equation)
    p = np.asarray(special.ndtr(first.index))
    column = two_stage_least_squares(replace(design, Z=p[:, None], instruments=(FITTED,)), options)
    facts, warned = overlap(p, chosen.D)
    moved = " and ".join(design.instruments)
    return replace(
        column,
        estimator="fitted_probability_instrument",
        title="Two-stage least squares, fitted probability as instrument",
        claim="has, under exclusion, an estimated effect of",
        estimand=f"average effect of {design.treatment} on {design.outcome} among deals whose "
        f"{design.treatment} is moved by {moved} through the fitted probability, if they reach "
        f"the outcome through {design.treatment} alone",
        fit={**column.fit, **facts},
        stages=(*column.stages, probit_estimate(first, chosen.equation, rule, options)),
        notes=(*column.notes, *warned),
        citation="Wooldridge (2010), procedure 21.1",
    )
