"""How alike treated and untreated deals are: overlap, differences before and after weighting."""

from __future__ import annotations

import numpy as np

from pipeline.core.prices import Booleans, Floats

BALANCED = 0.1
RATIO_LOW, RATIO_HIGH = 0.5, 2.0
EXTREME = 0.01
TRIM_LOW, TRIM_HIGH = 0.1, 0.9
MANY = 0.05


def overlap(p: Floats, D: Booleans) -> tuple[dict[str, float], tuple[str, ...]]:
    """Facts of fitted probabilities p (n,) and what a reader must know of them.

    propensity_smallest, _p10, _median, _p90 and _largest; propensity_extreme, the share outside
    [.01, .99]; propensity_thin, the share outside [.1, .9], the region that Crump and others
    (2009) would set aside; off_support, the share of deals beyond the other arm's range.
    """
    points = np.quantile(p, [0.0, 0.1, 0.5, 0.9, 1.0])
    labels = ("smallest", "p10", "median", "p90", "largest")
    low, high = max(p[D].min(), p[~D].min()), min(p[D].max(), p[~D].max())
    facts = {f"propensity_{label}": float(v) for label, v in zip(labels, points, strict=True)}
    facts["propensity_extreme"] = float(np.mean((p < EXTREME) | (p > 1 - EXTREME)))
    facts["propensity_thin"] = float(np.mean((p < TRIM_LOW) | (p > TRIM_HIGH)))
    facts["off_support"] = float(np.mean((p < low) | (p > high)))
    if facts["propensity_extreme"] <= MANY:
        return facts, ()
    share = 100 * facts["propensity_extreme"]
    note = (
        f"{share:.0f}% of deals have a fitted probability of the treatment below {EXTREME} or "
        f"above {1 - EXTREME}: for them the other arm is all but missing, and the estimate "
        "extrapolates."
    )
    return facts, (note,)


def effective_size(weights: Floats) -> float:
    """(Σw)²/Σw² of weights (m,): as many equally weighted deals as these are worth (Kish 1965)."""
    return float(weights.sum() ** 2 / np.sum(weights**2))


def standardised_differences(X: Floats, D: Booleans, weights: Floats) -> Floats:
    """(k,) weighted mean of the treated less that of the others, over the pooled spread.

    The spread is √((s₁² + s₀²)/2) of the unweighted arms, before and after alike, so that the two
    compare (Rosenbaum and Rubin 1985). X (n, k), weights (n,) ≥ 0; 0 where an arm does not vary.
    """
    one, other = _moments(X[D], weights[D])[0], _moments(X[~D], weights[~D])[0]
    spread = np.sqrt((X[D].var(axis=0, ddof=1) + X[~D].var(axis=0, ddof=1)) / 2)
    return np.asarray(np.where(spread > 0, (one - other) / np.where(spread > 0, spread, 1.0), 0.0))


def variance_ratios(X: Floats, D: Booleans, weights: Floats) -> Floats:
    """(k,) weighted variance of the treated over that of the others; NaN if either is zero."""
    one, other = _moments(X[D], weights[D])[1], _moments(X[~D], weights[~D])[1]
    both = (one > 0) & (other > 0)
    return np.asarray(np.where(both, one / np.where(both, other, 1.0), np.nan))


def _moments(X: Floats, weights: Floats) -> tuple[Floats, Floats]:
    share = weights / weights.sum()
    mean = share @ X
    return mean, np.asarray(share @ (X - mean) ** 2)


def balance_facts(
    X: Floats, names: tuple[str, ...], D: Booleans, weights: Floats
) -> tuple[dict[str, float], tuple[str, ...]]:
    """Balance of the controls X (n, k) before and under ``weights`` (n,), and a note if it fails.

    before.<name> and after.<name> are standardised differences, variance_ratio.<name> the ratio
    after; effective_treated and effective_untreated are :func:`effective_size`. Thresholds: .1 and
    [.5, 2] (common practice; Austin 2009, Rubin 2001).
    """
    varies = np.ptp(X, axis=0) > 0
    X, names = X[:, varies], tuple(n for n, v in zip(names, varies, strict=True) if v)
    before = standardised_differences(X, D, np.ones(len(D)))
    after = standardised_differences(X, D, weights)
    ratio = variance_ratios(X, D, weights)
    facts = {f"before.{n}": float(v) for n, v in zip(names, before, strict=True)}
    facts |= {f"after.{n}": float(v) for n, v in zip(names, after, strict=True)}
    facts |= {f"variance_ratio.{n}": float(v) for n, v in zip(names, ratio, strict=True) if v == v}
    facts["effective_treated"] = effective_size(weights[D])
    facts["effective_untreated"] = effective_size(weights[~D])
    off = [n for n, v in zip(names, after, strict=True) if abs(v) > BALANCED]
    wide = [
        n for n, v in zip(names, ratio, strict=True) if v == v and not RATIO_LOW <= v <= RATIO_HIGH
    ]
    notes = []
    if off:
        notes.append(
            f"Still out of balance (standardised difference above {BALANCED}): {', '.join(off)}."
        )
    if wide:
        notes.append(f"Variances differ by more than a factor of two: {', '.join(wide)}.")
    return facts, tuple(notes)
