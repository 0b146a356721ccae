"""Bounds on an effect when the treatment also moves who announces, without an exclusion."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy import optimize, special

from pipeline.core.design import Design, FitOptions, SelectionRows
from pipeline.core.estimate import ConfidenceSet, Estimate, EstimationFailed, Shape
from pipeline.core.prices import Booleans, Floats
from pipeline.estimators.algebra import refusal
from pipeline.estimators.column import Found, Labels, large_sample
from pipeline.estimators.errors import (
    ErrorRule,
    cautions,
    choose_errors,
    of_influence,
    positive,
    words,
)
from pipeline.estimators.sample import plain
from pipeline.estimators.selection_rows import candidates_of, check_rows
from pipeline.estimators.treatment import binary_treatment

LEE = "Lee (2009)"
INTERVAL = "Imbens and Manski (2004)"
NAMES = ("difference", "lower", "upper")


@dataclass(frozen=True, slots=True, eq=False)
class Bounds:
    """Bounds on the mean effect among those observed with or without the treatment.

    Attributes:
        lower, upper: the bounds; ``difference`` of the observed means lies between them.
        trimmed: share of the arm observed more often that is left out.
        treated_trimmed: whether that arm is the treated one.
        influence: (A, 3) of each row on (difference, lower, upper).
    """

    lower: float
    upper: float
    difference: float
    trimmed: float
    treated_trimmed: bool
    influence: Floats


def trimmed_mean(y: Floats, share: float, *, from_below: bool) -> tuple[float, float]:
    """Mean of ``y`` (m,) without its lowest (or highest) ``share``, and the value it is cut at.

    A row at the cut counts in part, so that exactly the share is left out.
    """
    values = np.sort(y) if from_below else np.sort(y)[::-1]
    out = share * len(y)
    weight = np.clip(np.arange(1, len(y) + 1) - out, 0.0, 1.0)
    cut = float(values[min(int(np.floor(out + 1e-12)), len(y) - 1)])
    return float(weight @ values / weight.sum()), cut


def bounds_of(y: Floats, D: Booleans, seen: Booleans) -> Bounds:
    """Lee's bounds for A rows: ``y`` (A,) read where ``seen`` (A,), treatment ``D`` (A,).

    The arm seen more often is trimmed by 1 - (smaller share)/(larger share), from below for one
    bound and from above for the other (Lee 2009, proposition 1). The influence counts the errors
    of the shares and of the cut (his proposition 3).

    Raises:
        EstimationFailed: if an arm has fewer than two rows seen.
    """
    if min((D & seen).sum(), (~D & seen).sum()) < 2:
        raise EstimationFailed("an arm has fewer than two deals to average")
    flip = bool(seen[D].mean() < seen[~D].mean())
    more = ~D if flip else D
    share = 1 - float(seen[~more].mean() / seen[more].mean())
    of_share = _share_influence(more, seen)
    sides = [_side(y, more & seen, share, of_share, from_below=below) for below in (True, False)]
    full, full_influence = _mean(y, more & seen)
    rest, rest_influence = _mean(y, ~more & seen)
    # Highest mean of the trimmed arm: the upper bound if it is the treated one, else the lower.
    high, low = sides
    values = [(full, full_influence), low, high]
    if flip:
        effects = [rest - v for v, _ in (values[0], values[2], values[1])]
        influence = [rest_influence - w for _, w in (values[0], values[2], values[1])]
    else:
        effects = [v - rest for v, _ in values]
        influence = [w - rest_influence for _, w in values]
    return Bounds(effects[1], effects[2], effects[0], share, not flip, np.column_stack(influence))


def _mean(y: Floats, rows: Booleans) -> tuple[float, Floats]:
    mean = float(y[rows].mean())
    return mean, np.where(rows, y - mean, 0.0) / rows.sum()


def _share_influence(more: Booleans, seen: Booleans) -> Floats:
    """Influence of each row on 1 - α₀/α₁, α the shares seen in the two arms."""
    high, low = float(seen[more].mean()), float(seen[~more].mean())
    of_high = np.where(more, seen - high, 0.0) / more.sum()
    of_low = np.where(~more, seen - low, 0.0) / (~more).sum()
    return np.asarray(-of_low / high + low / high**2 * of_high)


def _side(
    y: Floats, rows: Booleans, share: float, of_share: Floats, *, from_below: bool
) -> tuple[float, Floats]:
    mean, cut = trimmed_mean(y[rows], share, from_below=from_below)
    kept = y >= cut if from_below else y <= cut
    own = np.where(kept, y - cut, 0.0) - (1 - share) * (mean - cut)
    influence = np.where(rows, own, 0.0) / ((1 - share) * rows.sum())
    return mean, np.asarray(influence + (mean - cut) / (1 - share) * of_share)


def imbens_manski(
    lower: float, upper: float, se_lower: float, se_upper: float, level: float
) -> tuple[float, float]:
    """Interval that holds the effect, not the whole set, with probability ``level``.

    [l - C·se_l, u + C·se_u], C from Φ(C + (u - l)/max(se)) - Φ(-C) = level (Imbens and Manski
    2004, eqs. 6 and 7): 1.645 when the bounds lie far apart, 1.960 when they meet, at 95%.
    """
    width = (upper - lower) / max(se_lower, se_upper)

    def excess(C: float) -> float:
        return float(special.ndtr(C + width) - special.ndtr(-C)) - level

    C = float(optimize.brentq(excess, 0.0, 10.0, xtol=1e-12))
    return lower - C * se_lower, upper + C * se_upper


def lee_bounds(design: Design, options: FitOptions) -> Estimate:
    """Lee's bounds where the treatment is known for all candidates and may move who announces.

    The treatment's column must be among the selection equation's. No covariate is used. The
    coefficient is the plain difference of deal means, which the bounds enclose; ``robust_set`` is
    the Imbens-Manski interval for the effect. Errors by influence of each candidate, HC1 or
    clustered. It takes the treatment to be as good as random among candidates, and to move
    announcing in one direction only (Lee 2009): in deal data a sensitivity check.

    ``fit``: lower, upper, se_lower, se_upper, trimmed, trimmed_treated (1 or 0), candidates.
    ``sets``: bounds.

    Raises:
        InputProblem: ``no_selection``, ``selection_rows``, ``no_variation``,
            ``treatment_not_binary``, ``treatment_not_known``, or a problem of clusters or
            covariance.
        EstimationFailed: if an arm has fewer than two deals or a variance is not positive.
    """
    selection = _candidates(design)
    rule = choose_errors(
        selection.clusters,
        len(selection.selected),
        options,
        otherwise="hc1",
        cluster_by_default=True,
        supported=("hc0", "hc1"),
    )
    notes = plain(design, rule).notes
    binary_treatment(design)
    y = np.zeros(len(selection.selected))
    y[selection.selected] = design.y[selection.outcome_row[selection.selected]]
    D = selection.W[:, selection.names.index(design.treatment)] == 1.0
    found = bounds_of(y, D, selection.selected)
    errors = of_influence(rule, found.influence, 1)
    V = positive(errors.covariance, NAMES)
    return _estimate(
        design, options, rule, found, V, len(D), (*notes, *cautions(rule, errors.floored))
    )


def _candidates(design: Design) -> SelectionRows:
    selection = candidates_of(design)
    if design.treatment not in selection.names:
        raise refusal(
            "treatment_not_known",
            design.treatment,
            "known for deals only",
            "a treatment known for every candidate, among the selection variables",
            "bounds need it for those that did not announce; use another column",
        )
    check_rows(design, selection)
    return selection


def _estimate(
    design: Design,
    options: FitOptions,
    rule: ErrorRule,
    found: Bounds,
    V: Floats,
    candidates: int,
    notes: tuple[str, ...],
) -> Estimate:
    se = np.sqrt(np.diag(V))
    ends = imbens_manski(found.lower, found.upper, float(se[1]), float(se[2]), options.level)
    interval = ConfidenceSet(Shape.INTERVAL, *ends, options.level, f"{INTERVAL} around {LEE}")
    arm = "with" if found.treated_trimmed else "without"
    plain_difference = Found((design.treatment,), np.array([found.difference]), V[:1, :1])
    column = large_sample(design, options, rule, _labels(design, rule), plain_difference)
    return replace(
        column,
        fit={
            "lower": found.lower,
            "upper": found.upper,
            "se_lower": float(se[1]),
            "se_upper": float(se[2]),
            "trimmed": found.trimmed,
            "trimmed_treated": float(found.treated_trimmed),
            "candidates": float(candidates),
        },
        robust_set=interval,
        sets={"bounds": interval},
        notes=(
            *notes,
            f"Bounds {found.lower:.4f} to {found.upper:.4f}: {100 * found.trimmed:.1f}% of the "
            f"deals {arm} the feature are set aside, lowest for one bound and highest for the "
            "other. The coefficient shown is the plain difference between them.",
        ),
    )


def _labels(design: Design, rule: ErrorRule) -> Labels:
    return Labels(
        estimator="lee_bounds",
        title="Trimming bounds",
        estimand=f"bounds on the average effect of {design.treatment} on {design.outcome} among "
        "deals whose outcome is seen with or without it, if it is as good as random among all "
        "deals and moves being seen in one direction only",
        covariance=words(rule),
        citation=f"{LEE}; {INTERVAL}",
    )
