"""Treated and untreated made alike by weights: inverse probability and entropy balancing."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from scipy import special

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import Estimate
from pipeline.core.findings import InputProblem
from pipeline.core.prices import Floats
from pipeline.estimators.algebra import refusal
from pipeline.estimators.balance import balance_facts, overlap
from pipeline.estimators.column import Found, Labels, large_sample
from pipeline.estimators.errors import cautions, of_influence, words
from pipeline.estimators.likelihood_report import multiplier
from pipeline.estimators.propensity import Logit, Observed, fit_logit, observed

IPW = "Hirano, Imbens and Ridder (2003); Lunceford and Davidian (2004)"
BALANCING = "Hainmueller (2012)"
MOST_STEPS = 200
CONVERGED = 1e-22


def weighting(design: Design, options: FitOptions) -> Estimate:
    """Difference of means weighted by inverse probabilities, over all n deals (ATE).

    μ̂₁ = Σ(D y/ê)/Σ(D/ê), μ̂₀ = Σ((1 - D)y/(1 - ê))/Σ((1 - D)/(1 - ê)), ê a logit of the treatment
    on the controls (Hájek's form; Hirano, Imbens and Ridder 2003). Errors count that ê is
    estimated, by stacked moments (Lunceford and Davidian 2004): HC1 with n/(n - 1), clustered if
    the design has clusters; ``hc0`` too. Read against the normal, t(G - 1) with clusters. The one
    coefficient is the treatment's.

    ``fit``: mean_treated, mean_untreated (weighted), raw_difference, small_sample_factor, and the
    facts of :func:`~pipeline.estimators.balance.overlap` and
    :func:`~pipeline.estimators.balance.balance_facts`.

    Raises:
        InputProblem: see :func:`~pipeline.estimators.propensity.observed`; ``separation``.
        EstimationFailed: if the logit does not converge or the variance is not positive.
    """
    rows = observed(design, options)
    logit = fit_logit(rows.D, rows.X, rows.names)
    p, D = logit.p, rows.D
    weights = np.where(D, 1 / p, 1 / (1 - p))
    slopes = np.where(D, -(1 - p) / p, p / (1 - p))
    return _weighted(design, options, rows, logit, weights, slopes, on_treated=False)


def weighting_treated(design: Design, options: FitOptions) -> Estimate:
    """As :func:`weighting`, over the treated deals (ATT): the untreated weigh ê/(1 - ê)."""
    rows = observed(design, options)
    logit = fit_logit(rows.D, rows.X, rows.names)
    odds = logit.p / (1 - logit.p)
    weights = np.where(rows.D, 1.0, odds)
    slopes = np.where(rows.D, 0.0, odds)
    return _weighted(design, options, rows, logit, weights, slopes, on_treated=True)


def _weighted(
    design: Design,
    options: FitOptions,
    rows: Observed,
    logit: Logit,
    weights: Floats,
    slopes: Floats,
    *,
    on_treated: bool,
) -> Estimate:
    """``slopes`` (n,): derivative of each weight by the logit's index."""
    total = np.zeros(len(rows.y))
    means = []
    for sign, arm in ((1.0, rows.D), (-1.0, ~rows.D)):
        w = np.where(arm, weights, 0.0)
        mean = float(w @ rows.y / w.sum())
        through = (np.where(arm, slopes, 0.0) * (rows.y - mean)) @ rows.X
        total += sign * (w * (rows.y - mean) + logit.influence @ through) / w.sum()
        means.append(mean)
    key = "weighting_treated" if on_treated else "weighting"
    title = "Inverse-probability weighting" + (", treated deals" if on_treated else "")
    facts, warned = overlap(logit.p, rows.D)
    return weighted_estimate(
        design,
        options,
        rows,
        (key, title, IPW),
        estimand(design, on_treated=on_treated),
        (means[0], means[1], total),
        weights,
        (facts, warned),
    )


def estimand(design: Design, *, on_treated: bool) -> str:
    """What every observables estimator estimates, for whom."""
    who = "over the deals that have it (ATT)" if on_treated else "over all deals (ATE)"
    return (
        f"average effect of {design.treatment} on {design.outcome} {who}, if nothing that moves "
        f"both is missing from the controls and comparable deals exist on either side"
    )


def weighted_estimate(
    design: Design,
    options: FitOptions,
    rows: Observed,
    labels: tuple[str, str, str],
    meaning: str,
    found: tuple[float, float, Floats],
    weights: Floats,
    more: tuple[dict[str, float], tuple[str, ...]],
) -> Estimate:
    """The :class:`Estimate` of a difference of weighted means.

    ``labels``: key, title, citation. ``found``: the two means and the (n,) influence of each row
    on their difference. ``more``: further facts and notes.

    Raises:
        EstimationFailed: if the variance is not positive.
    """
    influence = found[2][:, None]
    errors = of_influence(rows.rule, influence, 1)
    balance, unbalanced = balance_facts(rows.X, rows.names, rows.D, weights)
    called = Labels(
        estimator=labels[0],
        title=labels[1],
        estimand=meaning,
        covariance=f"stacked moments of weights and means, {words(rows.rule)}",
        citation=labels[2],
    )
    effect = np.array([found[0] - found[1]])
    difference = Found((design.treatment,), effect, errors.covariance)
    column = large_sample(design, options, rows.rule, called, difference)
    return replace(
        column,
        fit={
            "mean_treated": found[0],
            "mean_untreated": found[1],
            "raw_difference": float(rows.y[rows.D].mean() - rows.y[~rows.D].mean()),
            "treated": float(rows.D.sum()),
            **more[0],
            **balance,
            **multiplier(rows.rule),
        },
        scores=influence,
        notes=(*rows.notes, *cautions(rows.rule, errors.floored), *more[1], *unbalanced),
    )


def entropy_balancing(design: Design, options: FitOptions) -> Estimate:
    """Untreated deals weighted so that the controls' means equal those of the treated (ATT).

    Of all such weights those nearest to equal ones in entropy: w_i ∝ exp(λ'(x_i - x̄₁)), λ the
    minimum of the convex dual ln Σ exp(λ'(x_i - x̄₁)) (Hainmueller 2012). Errors, ``fit`` and
    distribution as in :func:`weighting`: stacked moments count that λ and x̄₁ are estimated.

    Raises:
        InputProblem: see :func:`~pipeline.estimators.propensity.observed`; ``no_overlap`` if the
            treated's means lie outside what the untreated can be weighted to.
        EstimationFailed: if the variance is not positive.
    """
    rows = observed(design, options)
    D, varies = rows.D, np.ptp(rows.X, axis=0) > 0
    X = rows.X[:, varies]
    spread = X.std(axis=0)
    z = (X[~D] - X[D].mean(axis=0)) / spread
    share, names = _dual(z), tuple(n for n, v in zip(rows.names, varies, strict=True) if v)
    if share is None:
        raise _no_overlap(z, names)
    mean_other = float(share @ rows.y[~D])
    mean = float(rows.y[D].mean())
    inner = (z * share[:, None]).T @ z
    slope = np.linalg.solve(inner, (z * share[:, None]).T @ (rows.y[~D] - mean_other))
    influence = np.zeros(len(rows.y))
    centred = (X[D] - X[D].mean(axis=0)) / spread
    influence[D] = (rows.y[D] - mean - centred @ slope) / D.sum()
    influence[~D] = -share * (rows.y[~D] - mean_other - z @ slope)
    weights = np.ones(len(rows.y))
    weights[~D] = share * D.sum()
    return weighted_estimate(
        design,
        options,
        rows,
        ("entropy_balancing", "Entropy balancing, treated deals", BALANCING),
        estimand(design, on_treated=True),
        (mean, mean_other, influence),
        weights,
        ({"largest_weight": float(share.max())}, ()),
    )


def _dual(z: Floats) -> Floats | None:
    """(m,) weights that sum to one with mean zero of ``z`` (m, p); None if there are none."""
    point = np.zeros(z.shape[1])
    value = float(special.logsumexp(z @ point))
    for _ in range(MOST_STEPS):
        share = special.softmax(z @ point)
        gradient = share @ z
        hessian = (z * share[:, None]).T @ z - np.outer(gradient, gradient)
        try:
            move = -np.linalg.solve(hessian, gradient)
        except np.linalg.LinAlgError:
            return None
        decrement = float(-gradient @ move)
        if not np.isfinite(decrement) or decrement < 0:
            return None
        size = 1.0
        while size > 1e-12:
            new = float(special.logsumexp(z @ (point + size * move)))
            if new <= value - 1e-4 * size * decrement + 1e-14 * abs(value):
                break
            size /= 2
        point, value = point + size * move, new
        if decrement <= CONVERGED:
            share = np.asarray(special.softmax(z @ point))
            return share if np.abs(share @ z).max() < 1e-9 else None
    return None


def _no_overlap(z: Floats, names: tuple[str, ...]) -> InputProblem:
    outside = [
        name
        for name, column in zip(names, z.T, strict=True)
        if column.min() > 0 or column.max() < 0
    ]
    listed = ", ".join(outside) or ", ".join(names)
    return refusal(
        "no_overlap",
        listed,
        "no weights of the untreated deals reach the treated deals' means",
        "untreated deals on either side of the treated deals' means",
        "leave out the control, or the deals that have no counterpart",
    )
