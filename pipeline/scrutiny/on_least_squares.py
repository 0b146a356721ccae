"""The least-squares effect under every doubt about what was not recorded, or badly."""

from __future__ import annotations

import numpy as np

from pipeline.core.design import Design
from pipeline.core.estimate import Diagnostic, EstimationFailed, t_reach
from pipeline.core.findings import InputProblem
from pipeline.core.scrutiny import Contour, Variant
from pipeline.scrutiny import confounder, correlation, mismeasured, omitted, pairs
from pipeline.scrutiny.ground import Ground, ground_of, varying
from pipeline.scrutiny.influence import without_control
from pipeline.scrutiny.options import HOUSE, Part, ScrutinyOptions, Target
from pipeline.scrutiny.simex import simex

GAMMA_WANTED = 1.5
RHO_WANTED = 0.3


def controls_left_out(
    design: Design, ground: Ground, target: Target, options: ScrutinyOptions, *, effects: bool
) -> Part:
    """The effect without each control in turn, by the identity short = long + delta·gamma."""
    variants = []
    found = omitted.left_out(ground)
    for item in found:
        short = ground_of(without_control(design, item.control), options.fit, effects=effects)
        values = short.estimate, *_interval(short, options.level)
        words = f"without {options.words(item.control)}"
        variants.append(target.variant("controls", words, values))
    if not found:
        return Part()
    largest = max(found, key=lambda item: abs(item.short - item.long))
    facts = {
        "control_moves_most": largest.short - largest.long,
        "identity_gap": max(abs(item.gap) for item in found),
    }
    return Part(tuple(variants), facts=facts)


def _interval(ground: Ground, level: float) -> tuple[float, float]:
    half = t_reach(level, ground.robust_df) * ground.robust
    return ground.estimate - half, ground.estimate + half


def strength_needed(ground: Ground, target: Target, options: ScrutinyOptions) -> Part:
    """Robustness values, and confounders likened to the controls."""
    t = ground.estimate / ground.classical
    inflation = ground.robust / ground.classical
    reach = confounder.critical_reach(ground.df, options.level, inflation, ground.robust_df)
    value = confounder.robustness_value(t, ground.df)
    kept = confounder.robustness_value(t, ground.df, reach=reach)
    facts = {
        "robustness_value": value,
        "robustness_value_significant": kept,
        "robustness_value_half": confounder.robustness_value(t, ground.df, 0.5),
        "extreme_robustness_value": confounder.extreme_robustness_value(t, ground.df),
        "partial_r_squared": confounder.treatment_share(t, ground.df),
    }
    strongest = strongest_control(ground, options.level)
    names = options.benchmarks or ((strongest.control,) if strongest else ())
    variants = []
    for name in names:
        for multiple in options.multiples:
            b = confounder.benchmark(ground, name, multiple, options.level)
            if b.possible:
                times = "" if multiple == 1 else f"{multiple:g} times "
                words = f"a confounder {times}as strong as {options.words(name)}"
                values = b.estimate, b.ci_low, b.ci_high
                variants.append(target.variant("hidden confounder", words, values))
    compared = max((strongest.with_treatment, strongest.with_outcome)) if strongest else 0.0
    facts["strongest_control"] = compared
    check = target.check(
        "Robustness value",
        value,
        f"above {compared:.3f}, the strongest control's",
        value > compared,
        "A confounder that explains this share of what is left of both feature and return would "
        "bring the effect to zero.",
        confounder.CITATION,
    )
    return Part(tuple(variants), (check,), facts)


def strongest_control(ground: Ground, level: float) -> confounder.Benchmark | None:
    """The control whose like would take most from the effect; None without controls."""
    found = [confounder.benchmark(ground, name, 1.0, level) for name in varying(ground)]
    possible = [item for item in found if item.possible]
    sign = np.sign(ground.estimate)
    return min(possible, key=lambda item: float(sign * item.estimate), default=None)


def contour_of(ground: Ground, options: ScrutinyOptions) -> Contour:
    """Adjusted effects for every strength, with the controls on it."""
    names = options.benchmarks or varying(ground)
    multiples = options.multiples if options.benchmarks else options.multiples[:1]
    found = [confounder.benchmark(ground, n, m, options.level) for n in names for m in multiples]
    return confounder.contour(ground, found)


def proportional_selection(ground: Ground, target: Target, options: ScrutinyOptions) -> Part:
    """Oster's δ and effects for three values of the largest R²."""
    if not varying(ground):
        return Part()
    movement = omitted.movement_of(ground)
    values = omitted.r_max_grid(movement)
    clusters = ground.sample.rule.clusters
    codes = next(iter(clusters.values()), np.arange(ground.n))
    draws = omitted.resampled_effects(ground, codes, omitted.R_MAX, options.resamples, options.seed)
    variants: list[Variant] = []
    facts: dict[str, float] = {}
    for (name, r_max), key in zip(values.items(), ("1.3", "2", "plus_.25"), strict=True):
        found = omitted.adjusted_effect(movement, r_max)
        low, high = omitted.resampled_interval(
            found.effect, draws[name], ground.robust_df, options.level
        )
        words = f"what is hidden selects as strongly as the controls, largest R² {name}"
        row = found.effect, low, high
        variants.append(target.variant("proportional selection", words, row))
        strength = omitted.delta(movement, r_max)
        facts |= {f"oster_delta_{key}": strength, f"oster_roots_{key}": float(len(found.roots))}
    check = target.check(
        "Selection that would explain it away, times the controls'",
        facts["oster_delta_plus_.25"],
        "above 1 or below 0, at the R² plus .25",
        not 0 <= facts["oster_delta_plus_.25"] <= 1,
        "Below one, factors no stronger than the controls could be all of the effect.",
        omitted.CITATION,
    )
    return Part(tuple(variants), (check,), facts)


def recorded_badly(
    design: Design, ground: Ground, target: Target, options: ScrutinyOptions
) -> Part:
    """Regressors of known reliability and a feature recorded wrongly."""
    variants: list[Variant] = []
    facts: dict[str, float] = {}
    notes: list[str] = []
    feature = options.words(design.treatment)
    for name, value in options.reliability.items():
        found = mismeasured.reliability_corrected(ground, {name: value})
        words = f"{options.words(name)} recorded with reliability {value:g}"
        row = found.term(design.treatment, options.level)
        variants.append(target.variant("measurement error", words, row))
        bounds = mismeasured.reverse_bounds(ground, (name,))[design.treatment]
        words = f"{options.words(name)} recorded with any error"
        row = ground.estimate, bounds.low, bounds.high
        variants.append(target.variant("measurement error, bounds", words, row))
        facts[f"attenuation_{name}"] = mismeasured.attenuation(ground, name, value)
        if options.simex:
            film = simex(ground, name, value, seed=options.seed)
            row = film.estimates["quadratic"], *film.interval("quadratic", options.level)
            words = f"{options.words(name)} at reliability {value:g}, by simulation"
            variants.append(target.variant("measurement error", words, row))
    if len(options.reliability) > 1:
        row = mismeasured.reliability_corrected(ground, options.reliability).term(
            design.treatment, options.level
        )
        variants.append(target.variant("measurement error", "all reliabilities at once", row))
    if binary(design) and not ground.sample.levels:
        for missed, false in options.misclassified:
            try:
                row = mismeasured.misclassified(ground, missed, false, options.level)
            except InputProblem as failure:
                notes.append(f"A feature recorded wrongly was not tried: {failure}.")
                continue
            words = f"{feature}: {missed:.0%} missed, {false:.0%} recorded in error"
            variants.append(target.variant("misclassified feature", words, row))
    return Part(tuple(variants), facts=facts, notes=tuple(notes))


def binary(design: Design) -> bool:
    """Whether the treatment is 0 or 1."""
    values = np.unique(design.X[:, design.names.index(design.treatment)])
    return set(values.tolist()) == {0.0, 1.0}


def hidden_choice(design: Design, ground: Ground, target: Target, options: ScrutinyOptions) -> Part:
    """What choosers may have known: correlation of errors, and odds within matched pairs."""
    if not binary(design):
        return Part()
    variants: list[Variant] = []
    checks: list[Diagnostic] = []
    facts: dict[str, float] = {}
    notes: list[str] = []
    try:
        choice = correlation.treatment_choice(design)
        rho = correlation.breakdown_rho(ground, choice, options.level)
        for value in options.correlations if not ground.sample.levels else ():
            row = correlation.effect_at(ground, choice, value, options.level)
            words = f"errors of choice and return correlate by {value:+g}"
            variants.append(target.variant("hidden choice", words, row))
        facts["breakdown_rho"] = rho
        checks.append(
            target.check(
                "Correlation of choice and return errors that takes the effect",
                rho,
                f"above {RHO_WANTED} in size",
                not abs(rho) <= RHO_WANTED,
                "If choice and return share this much that is unrecorded, the interval holds zero.",
                f"{correlation.CITATION}; threshold {HOUSE}",
            )
        )
    except (InputProblem, EstimationFailed) as failure:
        notes.append(f"The choice of the feature could not be modelled: {failure}.")
    found = _pairs(design, target, options)
    return Part(
        tuple(variants),
        (*checks, *found.checks),
        {**facts, **found.facts},
        (*notes, *found.notes),
    )


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
    facts = {"gamma": gamma, "pairs": float(len(gaps)), "pair_difference": float(gaps.mean())}
    return Part((), (check,), facts)
