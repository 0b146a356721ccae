"""The instrumented effect if the instruments act by another way, and if choice answers return."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import asdict, replace
from functools import partial

import numpy as np

from pipeline.core.design import Design
from pipeline.core.estimate import (
    ConfidenceSet,
    Diagnostic,
    Estimate,
    EstimationFailed,
    NotApplicable,
    TestResult,
)
from pipeline.core.findings import InputProblem
from pipeline.core.prices import Floats
from pipeline.core.scrutiny import Variant
from pipeline.estimators.stages import Parts, parts_of
from pipeline.scrutiny import both_ways, breakdown, exclusion
from pipeline.scrutiny.ground import summed
from pipeline.scrutiny.options import HOUSE, Part, Row, ScrutinyOptions, Target, ends

BREAKDOWN_WANTED = 0.1
SIGNIFICANCE = 0.05
HAUSMAN = f"Hausman (1978); {exclusion.CITATION}"
DRAWN = tuple(float(share) for share in np.linspace(0, 1, 11))
Union = Callable[[Parts, Floats, Floats, float], ConfidenceSet]


def by_another_way(
    column: Estimate, design: Design, target: Target, options: ScrutinyOptions
) -> Part:
    """Instruments that also reach the outcome directly, up to shares of the reduced form."""
    try:
        parts = parts_of(design, summed(options.fit))
    except (InputProblem, EstimationFailed) as failure:
        return Part(notes=(f"The exclusion was not varied: {failure}.",))
    weak = column.robust_set is not None
    forms = exclusion.violated_forms(parts)
    robust = partial(exclusion.union_of_anderson_rubin, made=forms)
    union: Union = robust if weak else exclusion.union_of_intervals
    effect = float(column.coefficients[column.names.index(column.treatment)])
    variants = []
    for share in options.violations:
        row = effect, *_within(parts, share, union, options.level)
        words = (
            f"each instrument reaches the {target.outcome} directly, up to {share:.0%} of its "
            "reduced form"
        )
        variants.append(target.variant("exclusion", words, row))
    if options.violations:
        variants.append(_drawn_around_zero(parts, max(options.violations), target, options))
    facts = _shares(parts, forms, options.level)
    return Part(
        tuple(variants),
        (_check(facts, target, weak=weak),),
        facts,
        tables={
            "violations": _lines(parts, robust, options.level),
            "breakdowns": _falls(facts, target, weak=weak),
        },
    )


def _within(parts: Parts, share: float, union: Union, level: float) -> tuple[float, float]:
    pi = np.abs(exclusion.reduced_form(parts)) * share
    return ends(union(parts, -pi, pi, level))


def _drawn_around_zero(
    parts: Parts, share: float, target: Target, options: ScrutinyOptions
) -> Variant:
    """Local to zero: two standard deviations of the violations are ``share`` of the reduced form.

    The interval is that of two stages, which a weak instrument makes too short.
    """
    found = _local(parts, share, options.level)
    words = f"direct effects drawn around zero, nearly all within {share:.0%}; two-stage interval"
    return target.variant("exclusion", words, (found.estimate, found.low, found.high))


def _local(parts: Parts, share: float, level: float) -> exclusion.Allowed:
    pi = exclusion.reduced_form(parts)
    spread = np.diag((share * pi / 2) ** 2)
    return exclusion.local_to_zero(parts, np.zeros(len(pi)), spread, level)


def _lines(parts: Parts, robust: Union, level: float) -> list[Row]:
    """The ends of every kind of interval as the share allowed grows."""
    rows: list[Row] = []
    for share in DRAWN:
        local = _local(parts, share, level)
        kinds = {
            "two stages": _within(parts, share, exclusion.union_of_intervals, level),
            "Anderson–Rubin": _within(parts, share, robust, level),
            "drawn around zero": (local.low, local.high),
        }
        rows += [
            {"kind": kind, "share": share, "ci_low": low, "ci_high": high}
            for kind, (low, high) in kinds.items()
        ]
    other = breakdown.least_squares_of(parts)
    rows += [
        {"kind": "least squares", "share": share, "ci_low": other, "ci_high": other}
        for share in (DRAWN[0], DRAWN[-1])
    ]
    return rows


def _shares(parts: Parts, forms: exclusion.ViolatedForms, level: float) -> dict[str, float]:
    other = breakdown.least_squares_of(parts)
    return {
        "same_sample_least_squares": other,
        "breakdown_share": breakdown.breakdown_share(parts, level),
        "breakdown_share_anderson_rubin": breakdown.breakdown_share_anderson_rubin(
            parts, level, made=forms
        ),
        "share_least_squares": breakdown.breakdown_share(parts, level, other),
        "share_least_squares_anderson_rubin": breakdown.breakdown_share_anderson_rubin(
            parts, level, other, forms
        ),
        "share_reconciled": breakdown.share_that_reconciles(parts, level),
    }


def _check(facts: dict[str, float], target: Target, *, weak: bool) -> Diagnostic:
    value = facts["breakdown_share_anderson_rubin" if weak else "breakdown_share"]
    return target.check(
        "Share of the reduced form the instruments may reach by another way",
        value,
        f"above {BREAKDOWN_WANTED}",
        value > BREAKDOWN_WANTED,
        "At this share the interval begins to hold zero."
        if value > 0
        else "The interval holds zero even if the instruments act through the feature alone.",
        f"{exclusion.CITATION}; threshold {HOUSE}",
    )


def _falls(facts: dict[str, float], target: Target, *, weak: bool) -> list[Row]:
    tail = "_anderson_rubin" if weak else ""
    statements = (
        (
            "exclusion_zero",
            f"breakdown_share{tail}",
            "The set of the instrumented effect leaves out zero",
        ),
        (
            "exclusion_least_squares",
            f"share_least_squares{tail}",
            "The set of the instrumented effect leaves out the least-squares one",
        ),
        (
            "exclusion_difference",
            "share_reconciled",
            "The instrumented effect differs from least squares beyond the error of both",
        ),
    )
    return [
        target.breakdown(
            key,
            statement,
            f"The instruments move the {target.outcome} through the feature alone",
            f"the instruments do {{}} of what they do to the {target.outcome} by another way",
            (facts[name], "share"),
            BREAKDOWN_WANTED,
            f"{BREAKDOWN_WANTED:.0%}, {HOUSE}",
            HAUSMAN if key == "exclusion_difference" else exclusion.CITATION,
        )
        for key, name, statement in statements
    ]


def unequal_variances(design: Design, target: Target, options: ScrutinyOptions) -> Part:
    """The effect by instruments made from unequal variances, with its three tests."""
    try:
        column = exclusion.heteroskedastic_instruments(design, summed(options.fit))
    except (InputProblem, EstimationFailed) as failure:
        return Part(notes=(f"Instruments from unequal variances were not made: {failure}.",))
    strength, test = column.tests["effective_f"], column.tests["heteroskedasticity"]
    assert isinstance(strength, TestResult)
    assert isinstance(test, TestResult)
    facts = {"heteroskedastic_f": strength.statistic, "heteroskedasticity_p": test.p_value}
    told = replace(target, title=column.title)
    moves = told.check(
        "Variance of the choice moves with the controls, p",
        test.p_value,
        f"below {SIGNIFICANCE}",
        test.p_value < SIGNIFICANCE,
        "Instruments made from unequal variances say nothing where it does not.",
        f"Breusch and Pagan (1979), as used by {exclusion.LEWBEL}",
    )
    if test.p_value >= SIGNIFICANCE:
        note = (
            "Instruments from unequal variances say nothing here: the variance of the choice "
            "does not move with the controls."
        )
        return Part((), (moves,), facts, (note,))
    effect = float(column.coefficients[column.names.index(column.treatment)])
    row = effect, *ends(column.interval)
    words = "instruments made from unequal variances"
    checks = (moves, *_generated_checks(column, strength, told))
    return Part((target.variant("other instruments", words, row),), checks, facts)


def _generated_checks(
    column: Estimate, strength: TestResult, told: Target
) -> tuple[Diagnostic, ...]:
    found = told.check(
        "Strength of instruments from unequal variances, effective F",
        strength.statistic,
        f"above {strength.facts['critical_10']:.1f}",
        strength.statistic > strength.facts["critical_10"],
        "Below it this supplement says little; the study does not rest on it.",
        exclusion.LEWBEL,
    )
    agree = column.tests.get("overidentification")
    if agree is None or isinstance(agree, NotApplicable):
        return (found,)
    together = told.check(
        "Instruments from unequal variances agree with one another, p",
        agree.p_value,
        f"above {SIGNIFICANCE}",
        agree.p_value > SIGNIFICANCE,
        "If they disagree, some do not satisfy what they are made for.",
        agree.citation or exclusion.LEWBEL,
    )
    return (found, together)


def answered_by_choice(design: Design, target: Target, options: ScrutinyOptions) -> Part:
    """Return and choice as two equations, where the study names controls that leave the choice."""
    if not options.reverse:
        return Part()
    found = both_ways.both_ways(design, options.reverse, summed(options.fit))
    rows = [asdict(item) for item in found]
    variants = [
        target.variant(
            f"{target.outcome} and choice together",
            f"two equations by {item.method}",
            (item.coefficient, item.ci_low, item.ci_high),
        )
        for item in found
        if item.equation == "outcome" and item.term == design.treatment
    ]
    return Part(tuple(variants), tables={"both_ways": rows})
