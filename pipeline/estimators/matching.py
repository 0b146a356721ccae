"""Nearest-neighbour matching with replacement, its bias taken out, with errors made for it."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy import sparse
from scipy.spatial.distance import cdist

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import Estimate
from pipeline.core.prices import Booleans, Floats
from pipeline.estimators.algebra import refusal
from pipeline.estimators.balance import balance_facts
from pipeline.estimators.column import Found, Labels, large_sample
from pipeline.estimators.errors import Sandwich, cautions, of_influence, words
from pipeline.estimators.likelihood_report import multiplier
from pipeline.estimators.propensity import SUPPORTED, Observed, observed
from pipeline.estimators.weighting import estimand

CITATION = "Abadie and Imbens (2006, 2011); ties as in Abadie, Drukker, Herr and Imbens (2004)"
OWN = "abadie_imbens"
SAME_ARM = 2
TIE = 1e-8
CHUNK = 512


@dataclass(frozen=True, slots=True, eq=False)
class Matched:
    """Who stands for whom.

    Attributes:
        weights: (n, n) sparse; row i holds the shares of the other arm's deals that stand for i,
            summing to one, or nothing if i is not matched.
        K: (n,) Σ of a deal's shares, K2: (n,) Σ of their squares.
        sizes: (n,) how many deals stand for i.
    """

    weights: sparse.csr_array
    K: Floats
    K2: Floats
    sizes: Floats


def matching(design: Design, options: FitOptions) -> Estimate:
    """Each deal against its nearest deals of the other arm, over all n deals (ATE).

    Distance of the controls by their inverse covariance (Mahalanobis), ``options.matches`` nearest
    with replacement, all ties kept with equal shares. The gap in controls left within a match is
    taken out by least squares in each arm, weighted by use (Abadie and Imbens 2011). Variance of
    independent deals: Abadie and Imbens (2006), theorem 7, with σ²(x) from the two nearest deals of
    the own arm; a plain bootstrap would be wrong (Abadie and Imbens 2008). ``hc0``, ``hc1`` or
    clusters (the default if the design has them) sum the influence μ̂₁ - μ̂₀ - τ + (2D - 1)(1 + K)
    (y - μ̂_D) instead (Otsu and Rai 2017). Read against the normal, t(G - 1) with clusters.

    ``fit``: uncorrected, raw_difference, treated, matches, ties (share matched with more deals than
    asked), most_used (largest K), unused (share of deals that stand for nobody), distance_p90,
    small_sample_factor, facts of :func:`~pipeline.estimators.balance.balance_facts`.

    Raises:
        InputProblem: see :func:`~pipeline.estimators.propensity.observed`; ``few_rows`` if an arm
            has fewer deals than matches or than three; ``no_controls``.
        EstimationFailed: if the variance is not positive.
    """
    return _matching(design, options, on_treated=False)


def matching_treated(design: Design, options: FitOptions) -> Estimate:
    """As :func:`matching`, over the treated deals (ATT): untreated deals stand for the treated.

    Influence {D(y - μ̂₀ - τ) - (1 - D)K(y - μ̂₀)}/n₁.
    """
    return _matching(design, options, on_treated=True)


def _matching(design: Design, options: FitOptions, *, on_treated: bool) -> Estimate:
    rows = observed(design, options, otherwise=OWN, supported=(OWN, *SUPPORTED))
    _check_arms(rows, options.matches)
    Z = whitened(rows)
    found = match(Z, rows.D, options.matches, on_treated=on_treated)
    m1, m0 = (_line(rows, arm, found.K) for arm in (rows.D, ~rows.D))
    other = np.where(rows.D, m0, m1)
    matched = found.sizes > 0
    stand_in = found.weights @ rows.y
    gap = other - found.weights @ np.where(rows.D, m1, m0)
    sign = np.where(rows.D, 1.0, -1.0)
    each = sign * (rows.y - stand_in - gap)
    effect = float(each[matched].mean())
    plain = float((sign * (rows.y - stand_in))[matched].mean())
    influence = _influence(rows, found, m1, m0, effect, on_treated=on_treated)[:, None]
    if rows.rule.kind == OWN:
        V = np.array([[_variance(rows, Z, found, each, effect, on_treated=on_treated)]])
        errors = Sandwich(V, influence)
    else:
        errors = of_influence(rows.rule, influence, 1)
    weights = np.where(matched, 1.0, 0.0) + found.K
    facts = _facts(rows, found, Z, options, plain)
    return _column(design, options, rows, errors, effect, weights, facts, on_treated=on_treated)


def _column(
    design: Design,
    options: FitOptions,
    rows: Observed,
    errors: Sandwich,
    effect: float,
    weights: Floats,
    facts: dict[str, float],
    *,
    on_treated: bool,
) -> Estimate:
    own = rows.rule.kind == OWN
    suffix, who = ("_treated", ", treated deals") if on_treated else ("", "")
    labels = Labels(
        estimator=f"matching{suffix}",
        title=f"Nearest-neighbour matching{who}",
        estimand=estimand(design, on_treated=on_treated),
        covariance="Abadie-Imbens, robust to unequal variances, deals independent"
        if own
        else f"linear representation of the matching estimator, {words(rows.rule)}",
        citation=CITATION,
    )
    balance, unbalanced = balance_facts(rows.X, rows.names, rows.D, weights)
    found = Found((design.treatment,), np.array([effect]), errors.covariance)
    return replace(
        large_sample(design, options, rows.rule, labels, found),
        fit={**facts, **balance, **({} if own else multiplier(rows.rule))},
        scores=None if own else errors.influence,
        notes=(*rows.notes, *cautions(rows.rule, errors.floored), *unbalanced),
    )


def _check_arms(rows: Observed, matches: int) -> None:
    fewest, needed = int(min(rows.D.sum(), (~rows.D).sum())), max(matches, SAME_ARM + 1)
    if fewest < needed:
        raise refusal(
            "few_rows",
            "matches",
            f"an arm of {fewest} deals",
            f"at least {needed}",
            "ask for fewer matches or widen the sample",
        )
    if not (np.ptp(rows.X, axis=0) > 0).any():
        raise refusal(
            "no_controls",
            "controls",
            "no control that varies",
            "at least one, to say which deals are near",
            "name controls or use least squares",
        )


def whitened(rows: Observed) -> Floats:
    """(n, p) controls turned so that Euclidean distance is Mahalanobis's, constants left out."""
    X = rows.X[:, np.ptp(rows.X, axis=0) > 0]
    X = (X - X.mean(axis=0)) / X.std(axis=0)
    factor = np.linalg.cholesky(np.cov(X, rowvar=False).reshape(X.shape[1], -1))
    return np.asarray(np.linalg.solve(factor, X.T).T)


def nearest(Z: Floats, asking: Booleans, asked: Booleans, m: int) -> sparse.csr_array:
    """(n, n) equal shares of the ``m`` nearest ``asked`` deals of each ``asking`` one, ties kept.

    A deal is never its own neighbour. Z (n, p).
    """
    rows, columns = np.flatnonzero(asking), np.flatnonzero(asked)
    at, to, share = [], [], []
    for start in range(0, len(rows), CHUNK):
        block = rows[start : start + CHUNK]
        distance = cdist(Z[block], Z[columns])
        distance[block[:, None] == columns] = np.inf
        limit = np.partition(distance, m - 1, axis=1)[:, m - 1]
        i, j = np.nonzero(distance <= (limit * (1 + TIE) + TIE)[:, None])
        at.append(block[i])
        to.append(columns[j])
        share.append(1 / np.bincount(i, minlength=len(block))[i])
    shape = (len(Z), len(Z))
    parts = (np.concatenate(share), (np.concatenate(at), np.concatenate(to)))
    return sparse.csr_array(parts, shape=shape)


def match(Z: Floats, D: Booleans, m: int, *, on_treated: bool) -> Matched:
    """Every deal (or every treated one) with its ``m`` nearest of the other arm."""
    weights = nearest(Z, D, ~D, m)
    if not on_treated:
        weights = sparse.csr_array(weights + nearest(Z, ~D, D, m))
    return Matched(
        weights=weights,
        K=np.asarray(weights.sum(axis=0), dtype=np.float64).reshape(-1),
        K2=np.asarray(weights.multiply(weights).sum(axis=0), dtype=np.float64).reshape(-1),
        sizes=np.diff(weights.indptr).astype(np.float64),
    )


def _line(rows: Observed, arm: Booleans, K: Floats) -> Floats:
    """(n,) least squares of the arm's outcomes, weighted by how often a deal stands in."""
    use = arm & (K > 0)
    if not use.any():
        use, root = arm, np.ones(int(arm.sum()))
    else:
        root = np.sqrt(K[use])
    centre = rows.X[use].mean(axis=0)
    varies = np.ptp(rows.X[use], axis=0) > 0
    X = np.where(varies, rows.X - centre, 0.0)
    X = np.column_stack([np.ones(len(X)), X[:, varies]])
    size = np.sqrt(np.mean(X[use] ** 2, axis=0))
    # Least norm: a direction the arm's deals do not span corrects nothing.
    b = np.linalg.lstsq(X[use] / size * root[:, None], rows.y[use] * root, rcond=1e-10)[0]
    return np.asarray(X / size @ b)


def _influence(
    rows: Observed, found: Matched, m1: Floats, m0: Floats, effect: float, *, on_treated: bool
) -> Floats:
    D = rows.D
    if on_treated:
        residual = rows.y - m0
        return np.asarray(np.where(D, residual - effect, -found.K * residual) / D.sum())
    residual = np.where(D, rows.y - m1, -(rows.y - m0))
    return np.asarray((m1 - m0 - effect + (1 + found.K) * residual) / len(D))


def _variance(
    rows: Observed, Z: Floats, found: Matched, each: Floats, effect: float, *, on_treated: bool
) -> float:
    """Spread of the matched differences plus what reuse of a deal adds (theorem 7)."""
    sigma2 = own_variance(rows, Z)
    if on_treated:
        reuse = np.where(rows.D, 0.0, found.K**2 - found.K2)
        spread = float(np.sum((each[rows.D] - effect) ** 2))
        return (spread + float(reuse @ sigma2)) / float(rows.D.sum()) ** 2
    reuse = found.K**2 + 2 * found.K - found.K2
    return (float(np.sum((each - effect) ** 2)) + float(reuse @ sigma2)) / len(each) ** 2


def own_variance(rows: Observed, Z: Floats) -> Floats:
    """(n,) J/(J + 1)·(y - mean of the J nearest of the own arm)², J = 2 and ties."""
    D = rows.D
    near = sparse.csr_array(nearest(Z, D, D, SAME_ARM) + nearest(Z, ~D, ~D, SAME_ARM))
    J = np.diff(near.indptr).astype(np.float64)
    return np.asarray(J / (J + 1) * (rows.y - near @ rows.y) ** 2)


def _facts(
    rows: Observed, found: Matched, Z: Floats, options: FitOptions, plain: float
) -> dict[str, float]:
    matched = found.sizes > 0
    entries = found.weights.tocoo()
    length = np.linalg.norm(Z[entries.row] - Z[entries.col], axis=1)
    can_serve = ~rows.D if not matched[~rows.D].any() else np.ones(len(rows.D), dtype=np.bool_)
    return {
        "uncorrected": plain,
        "raw_difference": float(rows.y[rows.D].mean() - rows.y[~rows.D].mean()),
        "treated": float(rows.D.sum()),
        "matches": float(options.matches),
        "ties": float(np.mean(found.sizes[matched] > options.matches)),
        "most_used": float(found.K.max()),
        "unused": float(np.mean(found.K[can_serve] == 0)),
        "distance_p90": float(np.quantile(length, 0.9)),
    }
