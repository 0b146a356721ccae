"""Average effects from a model of the outcome and one of the treatment, each cross-fitted."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import Estimate, EstimationFailed
from pipeline.core.prices import Floats
from pipeline.estimators.algebra import refuse_dependent
from pipeline.estimators.balance import balance_facts, overlap
from pipeline.estimators.column import Found, Labels, large_sample
from pipeline.estimators.errors import (
    ErrorRule,
    cautions,
    choose_errors,
    of_influence,
    words,
)
from pipeline.estimators.learners import (
    CLIP,
    Folds,
    cross_fitted,
    folds_of,
    mean_learner,
    probability_learner,
)
from pipeline.estimators.likelihood_report import multiplier
from pipeline.estimators.propensity import SUPPORTED, Observed, observed, refuse_separated
from pipeline.estimators.sample import plain
from pipeline.estimators.weighting import estimand

AIPW = "Robins, Rotnitzky and Zhao (1994); Chernozhukov and others (2018)"
LINEAR = "Robinson (1988); Chernozhukov and others (2018)"
EXACT = 1e-12


def doubly_robust(design: Design, options: FitOptions) -> Estimate:
    """Augmented inverse-probability weighting over all n deals (ATE).

    Mean of ψ = m̂₁ - m̂₀ + D(y - m̂₁)/ê - (1 - D)(y - m̂₀)/(1 - ê): right if either the outcome's
    model m̂ or the treatment's ê is (Robins, Rotnitzky and Zhao 1994). Each is predicted for a deal
    from the other folds (``options.folds``, ``learner``, ``seed``), whole clusters together, so
    that flexible learners leave no trace in the errors (Chernozhukov and others 2018). Errors are
    those of a mean of ψ: HC1 with n/(n - 1), clustered if the design has clusters; ``hc0`` too.
    Read against the normal, t(G - 1) with clusters. ê of a flexible learner is held within
    [.01, .99], and how many deals that moved is said; a logit's is left alone.

    ``fit``: clipped (share), outcome_r_squared (out of fold), raw_difference, treated, folds,
    small_sample_factor, facts of :func:`~pipeline.estimators.balance.overlap` and
    :func:`~pipeline.estimators.balance.balance_facts`.

    Raises:
        InputProblem: see :func:`~pipeline.estimators.propensity.observed`; ``separation``
            (learner ``parametric``).
        EstimationFailed: if a fold leaves an arm without deals, or a variance is not positive.
    """
    return _doubly_robust(design, options, on_treated=False)


def doubly_robust_treated(design: Design, options: FitOptions) -> Estimate:
    """As :func:`doubly_robust`, over the treated deals (ATT).

    ψ = {D(y - m̂₀) - ê(1 - D)(y - m̂₀)/(1 - ê)}/mean(D).
    """
    return _doubly_robust(design, options, on_treated=True)


def _doubly_robust(design: Design, options: FitOptions, *, on_treated: bool) -> Estimate:
    rows = observed(design, options)
    D = rows.D
    folds = folds_of(design, D.astype(np.float64), rows.rule, options)
    _check_arms(rows, folds)
    learn = mean_learner(options)
    raw = cross_fitted(
        folds, probability_learner(options, rows.names), rows.X, D.astype(np.float64)
    )
    bound = 0.0 if options.learner == "parametric" else CLIP
    p = np.clip(raw, bound, 1 - bound)
    m0 = cross_fitted(folds, learn, rows.X, rows.y, ~D)
    if on_treated:
        residual = rows.y - m0
        psi = np.where(D, residual, -p * residual / (1 - p)) / D.mean()
        effect = float(psi.mean())
        influence = (psi - effect * D / D.mean()) / len(D)
        m1, weights = m0, np.where(D, 1.0, p / (1 - p))
    else:
        m1 = cross_fitted(folds, learn, rows.X, rows.y, D)
        psi = m1 - m0 + np.where(D, (rows.y - m1) / p, -(rows.y - m0) / (1 - p))
        effect = float(psi.mean())
        influence = (psi - effect) / len(D)
        weights = np.where(D, 1 / p, 1 / (1 - p))
    clipped = float(np.mean(raw != p))
    seen = ~D | (not on_treated)
    facts, said = _diagnosed(rows, p, weights, np.where(D, m1, m0), seen)
    facts |= {"clipped": clipped, "folds": float(folds.count)}
    suffix, who = ("_treated", ", treated deals") if on_treated else ("", "")
    meaning = estimand(design, on_treated=on_treated)
    notes = (*rows.notes, folds.note, _learner_note(options), *_clip_note(clipped), *said)
    labels = (f"doubly_robust{suffix}", f"Doubly robust{who}", AIPW, meaning)
    return _estimate(design, options, rows.rule, labels, effect, influence, facts, notes)


def _diagnosed(
    rows: Observed, p: Floats, weights: Floats, fitted: Floats, seen: np.ndarray
) -> tuple[dict[str, float], tuple[str, ...]]:
    """Overlap, balance and how well the outcome was predicted where it is ``seen``."""
    thin, warned = overlap(p, rows.D)
    balance, unbalanced = balance_facts(rows.X, rows.names, rows.D, weights)
    facts = {
        **thin,
        **balance,
        "outcome_r_squared": _explained(rows.y, fitted, seen),
        "raw_difference": float(rows.y[rows.D].mean() - rows.y[~rows.D].mean()),
        "treated": float(rows.D.sum()),
    }
    return facts, (*warned, *unbalanced)


def _check_arms(rows: Observed, folds: Folds) -> None:
    treated = rows.D[folds.order]
    for fitted, _ in folds.parts():
        if min(treated[fitted].sum(), (~treated[fitted]).sum()) < 5:
            raise EstimationFailed(
                "a fold leaves fewer than five deals with the treatment, or without it, to learn "
                "from: use fewer folds"
            )


def _explained(y: Floats, fitted: Floats, rows: np.ndarray) -> float:
    """Share of the variance of y explained, out of fold; negative if worse than the mean."""
    about = float(np.sum((y[rows] - y[rows].mean()) ** 2))
    return 1 - float(np.sum((y[rows] - fitted[rows]) ** 2)) / about if about > 0 else float("nan")


def _learner_note(options: FitOptions) -> str:
    return {
        "parametric": "Outcome by least squares in each arm, treatment by a logit.",
        "penalised": "Outcome by ridge and treatment by a penalised logit, on the controls, their "
        "squares and products.",
        "forest": "Outcome and treatment by random forests of the controls.",
    }[options.learner]


def _clip_note(share: float) -> tuple[str, ...]:
    if share == 0:
        return ()
    return (
        f"For {100 * share:.1f}% of deals the probability of the treatment was moved into "
        f"[{CLIP}, {1 - CLIP}].",
    )


def partially_linear(design: Design, options: FitOptions) -> Estimate:
    """Outcome less its prediction on treatment less its prediction, both from the controls.

    θ = Σv u/Σv², u = y - l̂(x), v = D - r̂(x), cross-fitted as in :func:`doubly_robust`; influence
    v(u - θv)/Σv² (Robinson 1988; Chernozhukov and others 2018, sec. 4.1). The treatment may be
    measured or yes and no. Errors and distribution as in :func:`doubly_robust`.

    ``fit``: outcome_r_squared and treatment_r_squared (out of fold), folds, small_sample_factor.

    Raises:
        InputProblem: ``no_variation``, ``collinear``, ``few_rows``, a problem of clusters or
            covariance; ``separation`` of a treatment of two values.
        EstimationFailed: if the controls predict the treatment exactly or a variance is not
            positive.
    """
    rule = choose_errors(
        design.clusters,
        design.n,
        options,
        otherwise="hc1",
        cluster_by_default=True,
        supported=SUPPORTED,
    )
    notes = plain(design, rule).notes
    refuse_dependent(design.X, design.names)
    at = design.names.index(design.treatment)
    D, X = design.X[:, at], np.delete(design.X, at, axis=1)
    if len(np.unique(D)) == 2:
        names = tuple(name for name in design.names if name != design.treatment)
        refuse_separated(D.max() == D, X, names)
    folds, learn = folds_of(design, D, rule, options), mean_learner(options)
    v = D - cross_fitted(folds, learn, X, D)
    u = design.y - cross_fitted(folds, learn, X, design.y)
    left = float(v @ v)
    if left <= EXACT * float(np.sum((D - D.mean()) ** 2)):
        raise EstimationFailed("the controls predict the treatment exactly")
    effect = float(v @ u) / left
    every = np.ones(design.n, dtype=np.bool_)
    facts = {
        "outcome_r_squared": _explained(design.y, design.y - u, every),
        "treatment_r_squared": _explained(D, D - v, every),
        "folds": float(folds.count),
    }
    labels = ("partially_linear", "Partially linear", LINEAR, _partial_meaning(design))
    influence = v * (u - effect * v) / left
    notes = (*notes, folds.note, _learner_note(options))
    return _estimate(design, options, rule, labels, effect, influence, facts, notes)


def _partial_meaning(design: Design) -> str:
    return (
        f"average effect of one more unit of {design.treatment} on {design.outcome}, weighted "
        "towards deals whose treatment the controls leave open, if nothing that moves both is "
        "missing from the controls"
    )


def _estimate(
    design: Design,
    options: FitOptions,
    rule: ErrorRule,
    labels: tuple[str, str, str, str],
    effect: float,
    influence: Floats,
    facts: dict[str, float],
    notes: tuple[str, ...],
) -> Estimate:
    errors = of_influence(rule, influence[:, None], 1)
    names = (design.treatment,)
    called = Labels(
        estimator=labels[0],
        title=labels[1],
        estimand=labels[3],
        covariance=f"of the mean of orthogonal scores, {words(rule)}",
        citation=labels[2],
    )
    column = large_sample(
        design, options, rule, called, Found(names, np.array([effect]), errors.covariance)
    )
    return replace(
        column,
        fit={**facts, **multiplier(rule)},
        scores=influence[:, None],
        notes=(*notes, *cautions(rule, errors.floored)),
    )
