"""The least-squares effect under every doubt about factors that were not recorded."""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np

from pipeline.core.design import Design
from pipeline.core.estimate import t_reach
from pipeline.core.prices import Floats
from pipeline.core.scrutiny import Contour, Variant
from pipeline.scrutiny import confounder, omitted
from pipeline.scrutiny.ground import Ground, ground_of, varying
from pipeline.scrutiny.influence import without_control
from pipeline.scrutiny.options import Part, Row, ScrutinyOptions, Target

SELECTION_WANTED = 1.0
CLASSICAL = (
    "The bias a hidden factor makes is computed from the error under equal variances, the only one "
    "its formula holds for, whatever errors the column reports; what is left of the interval uses "
    "the column's own error, made smaller or larger as the other one would be."
)


def controls_left_out(
    design: Design, ground: Ground, target: Target, options: ScrutinyOptions, *, effects: bool
) -> Part:
    """The effect without each control in turn, by the identity short = long + delta·gamma."""
    found = omitted.left_out(ground)
    if not found:
        return Part()
    variants = []
    for item in found:
        short = ground_of(without_control(design, item.control), options.fit, effects=effects)
        values = short.estimate, *interval_of(short, options.level)
        words = f"without {options.words(item.control)}"
        variants.append(target.variant("controls", words, values))
    largest = max(found, key=lambda item: abs(item.short - item.long))
    facts = {
        "control_moves_most": largest.short - largest.long,
        "identity_gap": max(abs(item.gap) for item in found),
    }
    names = ("control", "short", "long", "gamma", "delta", "gap")
    rows = [{name: getattr(item, name) for name in names} for item in found]
    return Part(tuple(variants), facts=facts, tables={"controls_left_out": rows})


def interval_of(ground: Ground, level: float) -> tuple[float, float]:
    """The robust t interval of the effect."""
    half = t_reach(level, ground.robust_df) * ground.robust
    return ground.estimate - half, ground.estimate + half


def strength_needed(ground: Ground, target: Target, options: ScrutinyOptions) -> Part:
    """Robustness values, and confounders likened to the controls."""
    t = ground.estimate / ground.classical
    inflation = ground.robust / ground.classical
    reach = confounder.critical_reach(ground.df, options.level, inflation, ground.robust_df)
    value = confounder.robustness_value(t, ground.df)
    kept = confounder.robustness_value(t, ground.df, reach=reach)
    strongest = strongest_control(ground, options.level)
    compared = max((strongest.with_treatment, strongest.with_outcome)) if strongest else 0.0
    facts = {
        "robustness_value": value,
        "robustness_value_significant": kept,
        "robustness_value_half": confounder.robustness_value(t, ground.df, 0.5),
        "extreme_robustness_value": confounder.extreme_robustness_value(t, ground.df),
        "partial_r_squared": confounder.treatment_share(t, ground.df),
        "strongest_control": compared,
    }
    found = benchmarks_of(ground, options, strongest)
    variants = [_likened(b, target, options) for b in found if b.possible]
    check = target.check(
        "Robustness value",
        value,
        f"above {compared:.3f}, the strongest control's",
        value > compared,
        f"A confounder that explains this share of what is left of both feature and "
        f"{target.outcome} would bring the effect to zero.",
        confounder.CITATION,
    )
    rows = _confounder_rows(target, options, strongest, kept, value, compared)
    tables = {"breakdowns": rows, "hidden_strengths": [_strength_row(b) for b in found]}
    return Part(tuple(variants), (check,), facts, (CLASSICAL,), tables)


def _confounder_rows(
    target: Target,
    options: ScrutinyOptions,
    strongest: confounder.Benchmark | None,
    kept: float,
    value: float,
    compared: float,
) -> list[Row]:
    words = "no control to compare it with"
    if strongest is not None:
        words = f"the strongest control, {options.words(strongest.control)}: {compared:.1%}"
    assumption = f"Nothing unrecorded moves both the feature and the {target.outcome}"
    needed = (
        f"a hidden factor explains {{}} of what is left of the feature and of the {target.outcome}"
    )
    return [
        target.breakdown(
            "confounder_interval",
            "The least-squares interval leaves out zero",
            assumption,
            needed,
            (kept, "share"),
            compared,
            words,
            confounder.CITATION,
        ),
        target.breakdown(
            "confounder_zero",
            "The least-squares effect keeps its sign",
            assumption,
            needed,
            (value, "share"),
            compared,
            words,
            confounder.CITATION,
        ),
    ]


def benchmarks_of(
    ground: Ground, options: ScrutinyOptions, strongest: confounder.Benchmark | None
) -> list[confounder.Benchmark]:
    """A confounder like each control named, or the strongest, at every multiple."""
    names = options.benchmarks or ((strongest.control,) if strongest else ())
    return [
        confounder.benchmark(ground, name, multiple, options.level)
        for name in names
        for multiple in options.multiples
    ]


def _likened(b: confounder.Benchmark, target: Target, options: ScrutinyOptions) -> Variant:
    times = "" if b.multiple == 1 else f"{b.multiple:g} times "
    words = f"a confounder {times}as strong as {options.words(b.control)}"
    return target.variant("hidden confounder", words, (b.estimate, b.ci_low, b.ci_high))


def _strength_row(b: confounder.Benchmark) -> Row:
    note = "" if b.possible else "no factor can be that strong"
    note = "strength with the outcome capped at one" if b.capped else note
    names = ("control", "multiple", "with_treatment", "with_outcome", "estimate", "ci_low")
    return {**{name: getattr(b, name) for name in names}, "ci_high": b.ci_high, "note": note}


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


def contour_rows(contour: Contour, reach: float) -> list[Row]:
    """One row a pair of strengths, ``reach`` what |t| must exceed; then the controls, labelled."""
    grid = [
        {
            "with_treatment": float(d),
            "with_outcome": float(y),
            "estimate": float(contour.estimates[i, j]),
            "statistic": float(contour.statistics[i, j]),
            "reach": reach,
            "label": "",
        }
        for i, y in enumerate(contour.with_outcome)
        for j, d in enumerate(contour.with_treatment)
    ]
    points = [
        {
            "with_treatment": d,
            "with_outcome": y,
            "estimate": estimate,
            "statistic": float("nan"),
            "reach": reach,
            "label": label,
        }
        for label, (d, y, estimate) in contour.points.items()
    ]
    return [*grid, *points]


def proportional_selection(ground: Ground, target: Target, options: ScrutinyOptions) -> Part:
    """Oster's δ and effects at the largest R² by three rules, and at each value asked for."""
    if not varying(ground):
        return Part()
    movement = omitted.movement_of(ground)
    draws = _resampled(ground, options)
    variants: list[Variant] = []
    facts: dict[str, float] = {}
    rows: list[Row] = []
    for (name, r_max), key in zip(
        omitted.r_max_grid(movement).items(), ("1.3", "2", "plus_.25"), strict=True
    ):
        row = _at_r_max(movement, name, r_max)
        effect = float(str(row["estimate"]))
        low, high = omitted.resampled_interval(effect, draws[name], ground.robust_df, options.level)
        rows.append({**row, "ci_low": low, "ci_high": high})
        words = f"hidden factors as selective as the controls, largest R² {name}"
        variants.append(target.variant("proportional selection", words, (effect, low, high)))
        strength = omitted.delta(movement, r_max)
        facts |= {f"oster_delta_{key}": strength}
        facts |= {f"oster_roots_{key}": float(len(str(row["roots"]).split(", ")))}
    asked = [value for value in options.largest_r2 if value > movement.long_r2]
    rows += [_at_r_max(movement, "as asked", value) for value in asked]
    needed = facts["oster_delta_plus_.25"]
    check = target.check(
        "Selection that would explain it away, times the controls'",
        needed,
        "above 1 or below 0, at the R² plus .25",
        not 0 <= needed <= SELECTION_WANTED,
        "Below one, factors no stronger than the controls could be all of the effect.",
        omitted.CITATION,
    )
    fall = target.breakdown(
        "proportional_selection",
        "The least-squares effect keeps its sign",
        "What was not recorded selects no more strongly than the controls",
        "hidden factors select {} times as strongly as all controls together and bring the R² up "
        "by .25",
        (needed if needed >= 0 else math.inf, "times"),
        SELECTION_WANTED,
        "as strongly as the controls: 1 time",
        omitted.CITATION,
    )
    tables = {"breakdowns": [fall], "largest_r2": rows}
    return Part(tuple(variants), (check,), facts, tables=tables)


def _resampled(ground: Ground, options: ScrutinyOptions) -> Mapping[str, Floats]:
    clusters = ground.sample.rule.clusters
    codes = next(iter(clusters.values()), np.arange(ground.n))
    return omitted.resampled_effects(ground, codes, omitted.R_MAX, options.resamples, options.seed)


def _at_r_max(movement: omitted.Movement, rule: str, r_max: float) -> Row:
    nan = float("nan")
    found = omitted.adjusted_effect(movement, r_max)
    note = "" if found.same_side else "no root on the side to which the controls moved the effect"
    return {
        "rule": rule,
        "largest_r2": r_max,
        "strength_for_zero": omitted.delta(movement, r_max),
        "estimate": found.effect,
        "ci_low": nan,
        "ci_high": nan,
        "approximation": omitted.approximate_effect(movement, r_max),
        "roots": ", ".join(f"{root:.10g}" for root in found.roots),
        "note": note,
    }
