"""The least-squares effect if those who chose the feature knew something: errors that correlate,
odds within matched pairs."""

from __future__ import annotations

import math

from pipeline.core.design import Design
from pipeline.core.estimate import EstimationFailed
from pipeline.core.findings import InputProblem
from pipeline.scrutiny import correlation, pairs
from pipeline.scrutiny.ground import Ground
from pipeline.scrutiny.on_records import binary
from pipeline.scrutiny.options import HOUSE, Part, ScrutinyOptions, Target

GAMMA_WANTED = 1.5
RHO_WANTED = 0.3


def hidden_choice(design: Design, ground: Ground, target: Target, options: ScrutinyOptions) -> Part:
    """What choosers may have known: correlation of errors, and odds within matched pairs."""
    if not binary(design):
        return Part()
    try:
        errors = _correlated(design, ground, target, options)
    except (InputProblem, EstimationFailed) as failure:
        errors = Part(notes=(f"The choice of the feature could not be modelled: {failure}.",))
    found = _pairs(design, target, options)
    breakdowns = [*errors.tables.get("breakdowns", ()), *found.tables.get("breakdowns", ())]
    return Part(
        errors.variants,
        (*errors.checks, *found.checks),
        {**errors.facts, **found.facts},
        (*errors.notes, *found.notes),
        {"breakdowns": breakdowns},
    )


def _correlated(design: Design, ground: Ground, target: Target, options: ScrutinyOptions) -> Part:
    if ground.sample.levels:
        return Part(notes=("Errors that correlate were not tried within fixed effects.",))
    choice = correlation.treatment_choice(design)
    rho = correlation.breakdown_rho(ground, choice, options.level)
    variants = [
        target.variant(
            "hidden choice",
            f"errors of choice and {target.outcome} correlate by {value:+g}",
            correlation.effect_at(ground, choice, value, options.level),
        )
        for value in options.correlations
    ]
    check = target.check(
        f"Correlation of choice and {target.outcome} errors that takes the effect",
        rho,
        f"above {RHO_WANTED} in size",
        not abs(rho) <= RHO_WANTED,
        f"If choice and {target.outcome} share this much that is unrecorded, the interval holds "
        "zero.",
        f"{correlation.CITATION}; threshold {HOUSE}",
    )
    fall = target.breakdown(
        "correlated_errors",
        "The least-squares interval leaves out zero",
        f"Those who chose knew nothing that also moves the {target.outcome}",
        f"the errors of choice and {target.outcome} correlate by {{}}",
        (math.inf if math.isnan(rho) else rho, "correlation"),
        RHO_WANTED,
        f"a correlation of {RHO_WANTED:g}, {HOUSE}",
        correlation.CITATION,
    )
    return Part(tuple(variants), (check,), {"breakdown_rho": rho}, tables={"breakdowns": [fall]})


def _pairs(design: Design, target: Target, options: ScrutinyOptions) -> Part:
    try:
        matched = pairs.matched_pairs(design)
        gaps = design.y[matched.treated] - design.y[matched.untreated]
        gamma = pairs.breakdown_gamma(gaps, options.level)
    except (InputProblem, ValueError) as failure:
        return Part(notes=(f"No matched pairs: {failure}.",))
    check = target.check(
        "Hidden odds of choice that matched pairs can bear, Γ",
        gamma,
        f"above {GAMMA_WANTED}",
        gamma > GAMMA_WANTED,
        "If something unrecorded makes one deal of a matched pair this many times as likely to be "
        "chosen, the difference is no longer significant.",
        f"{pairs.CITATION}; threshold {HOUSE}",
    )
    fall = target.breakdown(
        "hidden_odds",
        "Matched deals differ by more than chance",
        "Deals alike in the controls were equally likely to have the feature",
        "something hidden makes one of two like deals {} times as likely to have the feature",
        (gamma, "odds"),
        GAMMA_WANTED,
        f"odds of {GAMMA_WANTED:g} to one, {HOUSE}",
        pairs.CITATION,
    )
    facts = {"gamma": gamma, "pairs": float(len(gaps)), "pair_difference": float(gaps.mean())}
    return Part((), (check,), facts, tables={"breakdowns": [fall]})
