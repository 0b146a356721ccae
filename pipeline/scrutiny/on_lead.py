"""A column of the comparison table under doubts that hold for any: its deals, its instruments."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import (
    ConfidenceSet,
    Diagnostic,
    Estimate,
    EstimationFailed,
    Shape,
    TestResult,
)
from pipeline.core.findings import InputProblem
from pipeline.core.prices import Booleans
from pipeline.core.scrutiny import Variant
from pipeline.estimators.absorb import without_singletons
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.least_squares import fixed_effects, ols
from pipeline.estimators.stages import Parts, parts_of
from pipeline.scrutiny import exclusion, influence, mismeasured
from pipeline.scrutiny.anticipation import Expected, unanticipated
from pipeline.scrutiny.ground import summed
from pipeline.scrutiny.options import HOUSE, Part, ScrutinyOptions, Target

SHARE_WANTED = 0.05
BREAKDOWN_WANTED = 0.1
SIGNIFICANCE = 0.05


@dataclass(frozen=True, slots=True)
class Kind:
    """How a column is refitted, and which parts of the design it uses."""

    fit: Callable[[Design, FitOptions], Estimate]
    effects: bool
    instruments: bool


KINDS = {
    "ols": Kind(ols, False, False),
    "fixed_effects": Kind(fixed_effects, True, False),
    "two_stage_least_squares": Kind(two_stage_least_squares, True, True),
}
"""Columns that are functions of second moments, so that deals can be left out by algebra."""


def left_out(column: Estimate, design: Design, target: Target, options: ScrutinyOptions) -> Part:
    """Without each deal, cluster and level of an effect; and how many deals turn the sign."""
    kind = KINDS.get(column.estimator)
    if kind is None:
        note = f"{column.title}: deals were not left out in turn, only linear columns allow it."
        return Part(notes=(note,))
    try:
        moments = influence.moments_of(design, effects=kind.effects, instruments=kind.instruments)
    except ValueError as failure:
        return Part(notes=(f"{column.title}: deals were not left out in turn: {failure}.",))
    rows = [row for row, stays in zip(design.rows, moments.kept, strict=True) if stays]
    variants: list[Variant] = []
    checks: list[Diagnostic] = []
    facts: dict[str, float] = {}
    for name, codes in influence.dimensions(design, moments.kept).items():
        found = influence.leave_out(moments, codes, name)
        if len(found.groups) < 2 or np.isnan(found.effects).all():
            continue
        for at in dict.fromkeys(
            (int(np.nanargmin(found.effects)), int(np.nanargmax(found.effects)))
        ):
            words = _group(found, at, rows, codes, options)
            stays = np.ones(design.n, dtype=np.bool_)
            stays[np.flatnonzero(moments.kept)[codes == found.groups[at]]] = False
            row, n = _refitted(kind, design, stays, float(found.effects[at]), options)
            variants.append(target.variant(f"one {options.words(name)} left out", words, row, n))
        worst = found.largest
        value = float(found.effects[worst])
        facts |= {f"without_one_{name}": value, f"without_one_{name}_change": value - found.full}
        checks.append(_one_out(target, options.words(name), found, worst, rows, codes, options))
    fewest = influence.fewest_to_turn(moments, rows)
    facts |= {"fewest_deals": float(len(fewest.deals)), "fewest_share": fewest.share}
    checks.append(_fewest(target, fewest))
    return Part(tuple(variants), tuple(checks), facts)


def _group(
    found: influence.LeftOutGroups,
    at: int,
    rows: list[str],
    codes: np.ndarray,
    options: ScrutinyOptions,
) -> str:
    code = int(found.groups[at])
    names = options.groups.get(found.dimension)
    if names is not None:
        return f"without {names[code]}"
    return f"without {influence.named_by(rows, codes, code)}"


def _refitted(
    kind: Kind, design: Design, stays: Booleans, effect: float, options: ScrutinyOptions
) -> tuple[tuple[float, float, float], int]:
    nan = float("nan")
    try:
        column = kind.fit(influence.rows_of(design, stays), options.fit)
    except (InputProblem, EstimationFailed):
        return (effect, nan, nan), int(stays.sum())
    return (effect, *ends(column.interval)), column.n


def ends(found: ConfidenceSet) -> tuple[float, float]:
    """Low and high end; infinite unless the set is an interval, NaN if it is empty."""
    if found.shape is Shape.INTERVAL:
        return found.low, found.high
    if found.shape is Shape.EMPTY:
        return float("nan"), float("nan")
    return float("-inf"), float("inf")


def _one_out(
    target: Target,
    name: str,
    found: influence.LeftOutGroups,
    worst: int,
    rows: list[str],
    codes: np.ndarray,
    options: ScrutinyOptions,
) -> Diagnostic:
    turned = np.nansum(found.effects * found.full <= 0)
    return target.check(
        f"Effect {_group(found, worst, rows, codes, options)}, the {name} that moves it most",
        float(found.effects[worst]),
        "no one of them changes the sign",
        turned == 0,
        f"Look this {name} up: the answer leans on it more than on any other.",
        influence.CITATION,
    )


def _fewest(target: Target, found: influence.Fewest) -> Diagnostic:
    listed = ", ".join(found.deals[:3])
    return target.check(
        "Share of the deals whose absence turns the sign"
        if found.turned
        else "Share of the deals left out without turning the sign",
        found.share,
        f"above {SHARE_WANTED}",
        found.share > SHARE_WANTED or not found.turned,
        f"The first to go are {listed}; a small share means that few deals carry the answer.",
        f"After Broderick, Giordano and Meager 2020; threshold {HOUSE}",
    )


def by_another_way(
    column: Estimate, design: Design, target: Target, options: ScrutinyOptions
) -> Part:
    """Instruments that also reach the outcome directly, up to shares of the reduced form."""
    try:
        parts = parts_of(design, summed(options.fit))
    except (InputProblem, EstimationFailed) as failure:
        return Part(notes=(f"The exclusion was not varied: {failure}.",))
    weak = column.robust_set is not None
    pi = np.abs(exclusion.reduced_form(parts))
    variants = [_violated(column, parts, share, target, options) for share in options.violations]
    spread = np.diag((options.violations[-1] * pi / 2) ** 2) if options.violations else None
    if spread is not None and not weak:
        found = exclusion.local_to_zero(parts, np.zeros(len(pi)), spread, options.level)
        words = f"direct effects drawn around zero, nearly all within {options.violations[-1]:.0%}"
        row = found.estimate, found.low, found.high
        variants.append(target.variant("exclusion", words, row))
    wald = exclusion.breakdown_share(parts, options.level)
    robust = exclusion.breakdown_share_anderson_rubin(parts, options.level)
    value = robust if weak else wald
    check = target.check(
        "Share of the reduced form the instruments may reach by another way",
        value,
        f"above {BREAKDOWN_WANTED}",
        value > BREAKDOWN_WANTED,
        "At this share the interval begins to hold zero."
        if value > 0
        else "The interval holds zero even if the instruments act through the feature alone.",
        f"{exclusion.CITATION}; threshold {HOUSE}",
    )
    facts = {"breakdown_share": wald, "breakdown_share_anderson_rubin": robust}
    return Part(tuple(variants), (check,), facts)


def _violated(
    column: Estimate, parts: Parts, share: float, target: Target, options: ScrutinyOptions
) -> Variant:
    pi = np.abs(exclusion.reduced_form(parts)) * share
    make = (
        exclusion.union_of_intervals
        if column.robust_set is None
        else exclusion.union_of_anderson_rubin
    )
    low, high = ends(make(parts, -pi, pi, options.level))
    words = f"each instrument reaches the return directly, up to {share:.0%} of its reduced form"
    effect = float(column.coefficients[column.names.index(column.treatment)])
    return target.variant("exclusion", words, (effect, low, high))


def unequal_variances(design: Design, target: Target, options: ScrutinyOptions) -> Part:
    """The effect by instruments made from unequal variances, and whether they are strong."""
    try:
        column = exclusion.heteroskedastic_instruments(design, summed(options.fit))
    except (InputProblem, EstimationFailed) as failure:
        return Part(notes=(f"Instruments from unequal variances were not made: {failure}.",))
    strength, test = column.tests["effective_f"], column.tests["heteroskedasticity"]
    assert isinstance(strength, TestResult)
    assert isinstance(test, TestResult)
    effect = float(column.coefficients[column.names.index(column.treatment)])
    row = effect, *ends(column.interval)
    check = replace(
        target.check(
            "Strength of instruments from unequal variances, effective F",
            strength.statistic,
            f"above {strength.facts['critical_10']:.1f}",
            strength.statistic > strength.facts["critical_10"],
            "Below it this supplement says little; the study does not rest on it.",
            exclusion.LEWBEL,
        ),
        subject=column.title,
    )
    facts = {
        "heteroskedastic_f": strength.statistic,
        "heteroskedasticity_p": test.p_value,
    }
    if test.p_value >= SIGNIFICANCE:
        note = (
            "Instruments from unequal variances say nothing here: the variance of the choice "
            "does not move with the controls."
        )
        return Part((), (check,), facts, (note,))
    words = "instruments made from unequal variances"
    return Part((target.variant("other instruments", words, row),), (check,), facts)


def half_known(column: Estimate, design: Design, target: Target, options: ScrutinyOptions) -> Part:
    """News expected in part, deals that may not close, announcements on the wrong day."""
    variants = []
    effect = float(column.coefficients[column.names.index(column.treatment)])
    low, high = ends(column.interval)
    for share in options.misplaced:
        words = f"{share:.0%} of the announcements on days outside the window"
        row = mismeasured.rescaled(effect, low, high, 1 - share)
        variants.append(target.variant("announcement day", words, row))
    kept = kept_rows(column, design)
    for chances in options.expected:
        equal = chances.treated == chances.untreated
        if kept is None and not equal:
            continue
        if equal:
            share = chances.completion * (1 - chances.treated)
            row = mismeasured.rescaled(effect, low, high, share)
        else:
            assert kept is not None
            row = unanticipated(column, design, kept, chances, options.level)
        variants.append(target.variant("anticipation", _expected(chances, options, design), row))
    note = f"{column.title}: unequal anticipation was not tried, the column has no scores."
    return Part(tuple(variants), notes=(note,) if kept is None else ())


def _expected(chances: Expected, options: ScrutinyOptions, design: Design) -> str:
    feature = options.words(design.treatment)
    words = []
    if chances.treated or chances.untreated:
        words.append(
            f"{chances.treated:.0%} of the news known before"
            if chances.treated == chances.untreated
            else f"{chances.treated:.0%} of the news known before if {feature}, "
            f"{chances.untreated:.0%} if not"
        )
    if chances.completion < 1:
        words.append(f"{chances.completion:.0%} chance to close")
    return ", ".join(words) or "all news, sure to close"


def kept_rows(column: Estimate, design: Design) -> Booleans | None:
    """(n,) rows of the design that ``column.scores`` speaks of; None if they cannot be told."""
    if column.scores is None:
        return None
    everything = np.ones(design.n, dtype=np.bool_)
    if len(column.scores) == design.n:
        return everything
    if design.effects:
        kept = without_singletons(design.effects)
        if len(column.scores) == kept.sum():
            return kept
    return None
