"""Least squares that knows how precisely each deal's outcome was measured."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import Estimate, EstimationFailed
from pipeline.core.prices import Floats
from pipeline.estimators import diagnostics, few_clusters
from pipeline.estimators.algebra import leverage, refusal, refuse_dependent, solve
from pipeline.estimators.errors import (
    FEW,
    cautions,
    choose_errors,
    degrees_of_freedom,
    factor,
    words,
)
from pipeline.estimators.least_squares import SUPPORTED, Fitted, fit_sample
from pipeline.estimators.sample import Sample, plain

CITATION = "Hanushek (1974); Lewis and Linzer (2005)"


@dataclass(frozen=True, slots=True, eq=False)
class Weights:
    """Weights (n,) of mean one, the variance of the deals' own effects and whether it was floored.

    ``plain`` (k,) are the coefficients of unweighted least squares.
    """

    values: Floats
    own: float
    floored: bool
    plain: Floats


def variance_weighted(design: Design, options: FitOptions) -> Estimate:
    """Weights 1/(ω_i + σ̂_u²), ω_i the known measurement variance of the outcome of deal i.

    The outcome is y_i = x_i'β + u_i + ε_i, Var(ε_i) = ω_i given (n,) and Var(u_i) = σ_u² common
    and estimated from the residuals ê of least squares,

        σ̂_u² = (Σê² - Σω + tr((X'X)⁻¹X'ΩX)) / (n - k), zero if that is negative

    (Hanushek 1974; Lewis and Linzer 2005, eq. 5, from memory). ω = 0 gives least squares, σ_u = 0
    weights 1/ω. The errors are robust or clustered as in
    :func:`~pipeline.estimators.least_squares.ols` (HC3 by default), since the variance model is
    no more than a way to weigh. X is (n, k), the outcome decimal, ω decimal squared. Fixed
    effects are not taken out. df: n - k, G - 1 with clusters, Satterthwaite's with CR2.

    ``fit``: own_std_dev (σ̂_u), noise_share (mean ω over mean ω + σ̂_u²), weight_ratio (largest
    over smallest), least_squares, r_squared (weighted), condition_number, small_sample_factor.

    Raises:
        InputProblem: ``no_outcome_variance``, ``few_rows``, ``collinear``, ``no_variation``,
            ``fitted_exactly`` (HC2, HC3), or a problem of clusters or covariance.
        EstimationFailed: if a weight is infinite, the fit is exact or a variance not positive.
    """
    rule = choose_errors(design.clusters, design.n, options, otherwise="hc3", supported=SUPPORTED)
    sample = plain(design, rule)
    refuse_dependent(sample.X, sample.names)
    weights = _weights(design, sample)
    root = np.sqrt(weights.values)
    weighed = replace(sample, y=root * sample.y, X=root[:, None] * sample.X)
    return _estimate(design, options, weighed, fit_sample(weighed, design), weights)


def _estimate(
    design: Design, options: FitOptions, sample: Sample, fitted: Fitted, weights: Weights
) -> Estimate:
    rule, at = sample.rule, sample.names.index(design.treatment)
    df, sentence = degrees_of_freedom(rule, len(sample.names))
    if fitted.few is not None:
        df = float(fitted.few.df[at])
        sentence = few_clusters.df_sentence(rule, design.treatment, df)
    return Estimate(
        estimator="variance_weighted",
        title="Weighted by measurement error",
        estimand=f"difference in mean {design.outcome} associated with {design.treatment}, "
        "holding the controls fixed, deals measured more precisely counting for more",
        names=sample.names,
        coefficients=fitted.coefficients,
        covariance=fitted.covariance,
        df=df,
        df_rule=sentence,
        covariance_name=words(rule),
        n=sample.n,
        treatment=design.treatment,
        outcome=design.outcome,
        clusters=rule.counts,
        fit=_facts(design, sample, fitted, weights),
        scores=fitted.errors.influence,
        notes=_notes(sample, fitted, weights, at),
        citation=CITATION,
        level=options.level,
        df_each=None if fitted.few is None else fitted.few.df,
    )


def _weights(design: Design, sample: Sample) -> Weights:
    omega = design.outcome_variance
    if omega is None:
        raise refusal(
            "no_outcome_variance",
            design.outcome,
            f"no measurement variance of {design.outcome}",
            "one for every deal",
            "use a return measured from prices, name outcome.standard_error, or use another column",
        )
    b, e, bread = solve(sample.X, sample.y)
    surplus = float(e @ e) - float(omega.sum()) + float(omega @ leverage(sample.X, bread))
    own = max(surplus / (sample.n - len(b)), 0.0)
    total = omega + own
    if not (total > 0).all():
        raise EstimationFailed(
            "some outcomes are said to be measured without error and nothing else varies: their "
            "weight would be infinite"
        )
    values = 1 / total
    return Weights(np.asarray(values / values.mean()), own, surplus < 0, b)


def _facts(design: Design, weighed: Sample, fitted: Fitted, weights: Weights) -> dict[str, float]:
    omega = design.outcome_variance
    noise = 0.0 if omega is None else float(omega.mean())
    centre = float(weights.values @ design.y) / float(weights.values.sum())
    about = float(weights.values @ (design.y - centre) ** 2)
    facts = {
        "own_std_dev": float(np.sqrt(weights.own)),
        "noise_share": noise / (noise + weights.own),
        "weight_ratio": float(weights.values.max() / weights.values.min()),
        "least_squares": float(weights.plain[design.names.index(design.treatment)]),
        "r_squared": 1 - float(fitted.residuals @ fitted.residuals) / about,
        "condition_number": diagnostics.condition_number(weighed.X),
        "small_sample_factor": factor(weighed.rule, len(weighed.names)),
    }
    return {name: value for name, value in facts.items() if not np.isnan(value)}


def _notes(weighed: Sample, fitted: Fitted, weights: Weights, at: int) -> tuple[str, ...]:
    notes = [*weighed.notes, *cautions(weighed.rule, fitted.errors.floored)]
    if fitted.few is not None and weighed.rule.kind in FEW:
        notes += few_clusters.notes(weighed.rule, weighed.names, fitted.few, at)
    if weights.floored:
        notes.append(
            "The measurement errors alone would scatter the outcomes more than they scatter: the "
            "deals' own variance is set to zero and the weights are those of measurement alone."
        )
    return tuple(notes)
