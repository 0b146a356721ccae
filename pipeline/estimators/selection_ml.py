"""Heckman's selection model by maximum likelihood: both equations at once."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from pipeline.core.design import Design, FitOptions, SelectionRows
from pipeline.core.estimate import Estimate
from pipeline.core.prices import Floats
from pipeline.estimators import likelihood_maximum
from pipeline.estimators.algebra import refuse_dependent
from pipeline.estimators.column import Found, Labels, large_sample
from pipeline.estimators.errors import ErrorRule, cautions, choose_errors, words
from pipeline.estimators.joint_normal import Joint
from pipeline.estimators.likelihood_maximum import Maximum
from pipeline.estimators.likelihood_report import (
    correlation_tests,
    facts,
    likelihood_covariance,
    likelihood_notes,
    likelihood_words,
    multiplier,
)
from pipeline.estimators.probit import Equation, fit_probit, limits
from pipeline.estimators.sample import plain
from pipeline.estimators.selection import (
    LAMBDA,
    curvature_alone,
    equation_notes,
    estimand,
    excluded_test,
    second_step,
)
from pipeline.estimators.selection_rows import checked_selection

SUPPORTED = ("classical", "hc0", "hc1")
CITATION = "Heckman (1974); Olsen (1982); Maddala (1983), sec. 9.2"


def heckman_likelihood(design: Design, options: FitOptions) -> Estimate:
    """Maximum likelihood of announcing (all A candidates) and of the outcome (the n deals).

    ln L = Σ_unselected ln Φ(-w'γ) + Σ_selected {ln Φ[(w'γ + ρe)/√(1 - ρ²)] + ln φ(e) - ln σ},
    e = (y - x'β)/σ, over (γ, β, ln σ, atanh ρ) (Heckman 1974; Maddala 1983, sec. 9.2). Errors:
    inverse of the observed information by default; ``hc0``, ``hc1`` (n/(n - 1)) or ``cluster``
    (G/(G - 1)) give the sandwich, which does not repair a wrong likelihood. Read against the
    normal, t(G - 1) with clusters. ``n`` counts deals.

    ``fit``: sigma, rho, lambda (ρσ), each with se_; atanh_rho, log_likelihood,
    log_likelihood_independent, profile.<ρ> (log-likelihood less its maximum), starts,
    starts_agreeing, gradient (in standard errors), information_condition, candidates, selected.
    ``tests``: no_selection (Wald on atanh ρ), likelihood_ratio, excluded_variables. ``stages``:
    the selection equation.

    Raises:
        InputProblem: as :func:`~pipeline.estimators.selection.heckman_two_step`.
        EstimationFailed: if the likelihood has no interior maximum, does not converge, or its
            information is singular.
    """
    selection = checked_selection(design)
    candidates = len(selection.selected)
    rule = choose_errors(
        selection.clusters, candidates, options, otherwise="classical", supported=SUPPORTED
    )
    notes = plain(design, rule).notes
    refuse_dependent(design.X, design.names)
    found = _maximum(design, selection)
    names = (*selection.names, *design.names, "ln sigma", "atanh rho")
    V, floored = likelihood_covariance(found, rule, names)
    q = selection.W.shape[1]
    stage = _stage(selection, found, V[:q, :q], rule, options)
    outcome = Found(design.names, found.beta, V[q:-2, q:-2])
    column = large_sample(design, options, rule, _labels(design, selection, rule), outcome)
    return replace(
        column,
        fit={
            **facts(found, V),
            "candidates": float(candidates),
            "selected": float(selection.selected.sum()),
            **curvature_alone(selection, options),
        },
        tests={
            "excluded_variables": excluded_test(stage, selection),
            **correlation_tests(found, V, column.df, rule, CITATION),
        },
        stages=(stage,),
        notes=(
            *notes,
            *cautions(rule, floored),
            *likelihood_notes(found),
            *equation_notes(design, selection),
        ),
    )


def _labels(design: Design, selection: SelectionRows, rule: ErrorRule) -> Labels:
    return Labels(
        estimator="heckman_likelihood",
        title="Heckman maximum likelihood",
        estimand=estimand(design, selection),
        covariance=likelihood_words(rule, words(rule)),
        citation=CITATION,
    )


def _maximum(design: Design, selection: SelectionRows) -> Maximum:
    model, gamma, start = joint_model(design, selection)
    return likelihood_maximum.maximise(model, gamma, start)


def joint_model(
    design: Design, selection: SelectionRows
) -> tuple[Joint, Floats, tuple[Floats, float, float]]:
    """The likelihood's rows, the probit's coefficients (q,), and the two-step (β, σ, ρ).

    Raises:
        InputProblem: as :func:`~pipeline.estimators.probit.fit_probit`; ``collinear``.
        EstimationFailed: if the probit does not converge or the outcome is fitted exactly.
    """
    equation = Equation(
        selection.selected, selection.W, selection.names, "announcing a deal", _key(selection)
    )
    first = fit_probit(equation)
    step = second_step(design, selection, first, (*design.names, LAMBDA))
    at = np.flatnonzero(selection.selected)
    rows = selection.outcome_row[at]
    model = Joint(
        signs=np.where(selection.selected, 1.0, -1.0),
        W=selection.W,
        at=at,
        y=design.y[rows],
        X=design.X[rows],
    )
    return model, first.coefficients, (step.coefficients[:-1], step.sigma, step.rho)


def _key(selection: SelectionRows) -> str:
    return (*selection.excluded, *selection.names[::-1])[0]


def _stage(
    selection: SelectionRows, found: Maximum, V: Floats, rule: ErrorRule, options: FitOptions
) -> Estimate:
    df, sentence = limits(rule)
    return Estimate(
        estimator="selection_equation",
        title="Selection equation, jointly with the outcome",
        estimand="change in the normal index of announcing a deal associated with one more unit "
        "of a variable, holding the others fixed",
        names=selection.names,
        coefficients=found.gamma,
        covariance=V,
        df=df,
        df_rule=sentence,
        covariance_name=likelihood_words(rule, words(rule)),
        n=len(selection.selected),
        treatment=_key(selection),
        outcome="announcing a deal",
        clusters=rule.counts,
        fit=multiplier(rule),
        scores=found.influence[:, : selection.W.shape[1]],
        citation=CITATION,
        level=options.level,
    )
