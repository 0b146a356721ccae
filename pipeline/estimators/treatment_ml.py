"""An endogenous treatment by maximum likelihood: choice and outcome at once."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from scipy import special

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import Estimate
from pipeline.core.prices import Floats
from pipeline.estimators import likelihood_maximum
from pipeline.estimators.algebra import solve
from pipeline.estimators.balance import overlap
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
from pipeline.estimators.probit import fit_probit, limits
from pipeline.estimators.sample import plain
from pipeline.estimators.treatment import (
    SUPPORTED,
    Chosen,
    chosen_of,
    control_function,
    excluded_from_outcome,
    joint_estimand,
)

CITATION = "Heckman (1978); Maddala (1983), sec. 5.7"


def treatment_likelihood(design: Design, options: FitOptions) -> Estimate:
    """Maximum likelihood of the treatment's choice and the outcome of all n deals.

    ln L = Σ ln Φ[q(w'γ + ρe)/√(1 - ρ²)] + ln φ(e) - ln σ, q = 2D - 1, e = (y - x'β - αD)/σ, over
    (γ, β, α, ln σ, atanh ρ) (Maddala 1983, sec. 5.7). Errors, distribution and ``fit`` as in
    :func:`~pipeline.estimators.selection_ml.heckman_likelihood`; also least_squares, treated and
    the facts of :func:`~pipeline.estimators.balance.overlap`. ``tests``: no_selection (Wald on
    atanh ρ, that is exogeneity), likelihood_ratio, excluded_variables. ``stages``: the treatment
    equation.

    Raises:
        InputProblem: see :func:`~pipeline.estimators.treatment.treatment_two_step`.
        EstimationFailed: if the likelihood has no interior maximum, does not converge, or its
            information is singular.
    """
    rule = choose_errors(
        design.clusters, design.n, options, otherwise="classical", supported=SUPPORTED
    )
    notes = plain(design, rule).notes
    chosen = chosen_of(design, options)
    found = _maximum(design, chosen)
    q = chosen.equation.W.shape[1]
    names = (*chosen.equation.names, *design.names, "ln sigma", "atanh rho")
    V, floored = likelihood_covariance(found, rule, names)
    stage = _stage(chosen, found, V[:q, :q], rule, options)
    thin, warned = overlap(np.asarray(special.ndtr(chosen.equation.W @ found.gamma)), chosen.D)
    alone = solve(design.X, design.y)[0]
    outcome = Found(design.names, found.beta, V[q:-2, q:-2])
    column = large_sample(design, options, rule, _labels(design, rule), outcome)
    return replace(
        column,
        fit={
            **facts(found, V),
            **thin,
            **multiplier(rule),
            "least_squares": float(alone[design.names.index(design.treatment)]),
            "treated": float(chosen.D.sum()),
        },
        tests={
            "excluded_variables": excluded_from_outcome(design, stage),
            **correlation_tests(found, V, column.df, rule, CITATION),
        },
        stages=(stage,),
        scores=found.influence[:, q:-2],
        notes=(*notes, *cautions(rule, floored), *likelihood_notes(found), *warned),
    )


def _labels(design: Design, rule: ErrorRule) -> Labels:
    return Labels(
        estimator="treatment_likelihood",
        title="Endogenous treatment, maximum likelihood",
        estimand=joint_estimand(design),
        covariance=likelihood_words(rule, words(rule)),
        citation=CITATION,
    )


def _maximum(design: Design, chosen: Chosen) -> Maximum:
    first = fit_probit(chosen.equation)
    step = control_function(design, chosen, first)
    signs = np.where(chosen.D, 1.0, -1.0)
    model = Joint(signs, chosen.equation.W, np.arange(design.n), design.y, design.X)
    start = (step.coefficients[:-1], step.sigma, step.rho)
    return likelihood_maximum.maximise(model, first.coefficients, start)


def _stage(
    chosen: Chosen, found: Maximum, V: Floats, rule: ErrorRule, options: FitOptions
) -> Estimate:
    df, sentence = limits(rule)
    equation = chosen.equation
    return Estimate(
        estimator="treatment_equation",
        title="Treatment equation, jointly with the outcome",
        estimand=f"change in the normal index of {equation.outcome} associated with one more unit "
        "of a variable, holding the others fixed",
        names=equation.names,
        coefficients=found.gamma,
        covariance=V,
        df=df,
        df_rule=sentence,
        covariance_name=likelihood_words(rule, words(rule)),
        n=len(chosen.D),
        treatment=equation.key,
        outcome=equation.outcome,
        clusters=rule.counts,
        fit=multiplier(rule),
        scores=found.influence[:, : equation.W.shape[1]],
        citation=CITATION,
        level=options.level,
    )
