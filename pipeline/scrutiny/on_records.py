"""The least-squares effect if regressors, or the feature itself, were recorded with error."""

from __future__ import annotations

import numpy as np

from pipeline.core.design import Design
from pipeline.core.estimate import EstimationFailed
from pipeline.core.findings import InputProblem
from pipeline.core.scrutiny import Variant
from pipeline.estimators.algebra import refusal
from pipeline.scrutiny import mismeasured
from pipeline.scrutiny.ground import Ground
from pipeline.scrutiny.options import Part, Row, ScrutinyOptions, Target
from pipeline.scrutiny.simex import Simex, curve, simex

DRAWN = np.linspace(-1.0, 2.0, 31)


def recorded_badly(
    design: Design, ground: Ground, target: Target, options: ScrutinyOptions
) -> Part:
    """Regressors of known reliability and a feature recorded wrongly."""
    variants: list[Variant] = []
    facts: dict[str, float] = {}
    films: list[Row] = []
    notes: list[str] = []
    _refuse_choice(design, options)
    for name, value in options.reliability.items():
        variants += _corrected(design, ground, name, value, target, options)
        facts[f"attenuation_{name}"] = mismeasured.attenuation(ground, name, value)
        if options.simex:
            try:
                film = simex(ground, name, value, seed=options.seed)
            except EstimationFailed as failure:
                notes.append(f"Errors of {options.words(name)} not simulated: {failure.reason}.")
                continue
            variants += _simulated(film, options.words(name), value, target, options)
            films += _film_rows(film, options.words(name))
    if len(options.reliability) > 1:
        row = mismeasured.reliability_corrected(ground, options.reliability).term(
            design.treatment, options.level
        )
        variants.append(target.variant("measurement error", "all reliabilities at once", row))
    wrong = _misclassified(design, ground, target, options)
    return Part(
        (*variants, *wrong.variants),
        facts=facts,
        notes=(*notes, *wrong.notes),
        tables={"extrapolation": films},
    )


def _refuse_choice(design: Design, options: ScrutinyOptions) -> None:
    """The error of a 0/1 feature moves against its truth, which no reliability describes."""
    if design.treatment in options.reliability and binary(design):
        raise refusal(
            "reliability_of_choice",
            f"scrutiny.reliability.{design.treatment}",
            "a reliability of a feature that is 0 or 1",
            "rates of misclassification",
            "give scrutiny.misclassified in its place",
        )


def _corrected(
    design: Design,
    ground: Ground,
    name: str,
    value: float,
    target: Target,
    options: ScrutinyOptions,
) -> list[Variant]:
    found = mismeasured.reliability_corrected(ground, {name: value})
    row = found.term(design.treatment, options.level)
    words = f"{options.words(name)} recorded with reliability {value:g}"
    bounds = mismeasured.reverse_bounds(ground, (name,))[design.treatment]
    widest = ground.estimate, bounds.low, bounds.high
    any_error = f"{options.words(name)} recorded with any error"
    return [
        target.variant("measurement error", words, row),
        target.variant("measurement error, bounds", any_error, widest),
    ]


def _simulated(
    film: Simex, words: str, value: float, target: Target, options: ScrutinyOptions
) -> list[Variant]:
    return [
        target.variant(
            "measurement error",
            f"{words} at reliability {value:g}, by simulation and a {kind} curve",
            (film.estimates[kind], *film.interval(kind, options.level)),
        )
        for kind in film.estimates
    ]


def _film_rows(film: Simex, words: str) -> list[Row]:
    """What was simulated, and each curve drawn through it."""
    rows: list[Row] = [
        {"variable": words, "curve": "simulated", "zeta": float(z), "estimate": float(b)}
        for z, b in zip(film.zeta, film.path, strict=True)
    ]
    for kind in film.estimates:
        drawn = curve(film.zeta, film.path, kind, DRAWN)
        rows += [
            {"variable": words, "curve": kind, "zeta": float(z), "estimate": float(b)}
            for z, b in zip(DRAWN, drawn, strict=True)
        ]
    return rows


def _misclassified(
    design: Design, ground: Ground, target: Target, options: ScrutinyOptions
) -> Part:
    if not binary(design) or ground.sample.levels:
        return Part()
    variants, notes = [], []
    feature = options.words(design.treatment)
    for missed, false in options.misclassified:
        try:
            row = mismeasured.misclassified(ground, missed, false, options.level)
        except InputProblem as failure:
            notes.append(f"A feature recorded wrongly was not tried: {failure}.")
            continue
        words = f"{feature}: {missed:.0%} missed, {false:.0%} recorded in error"
        variants.append(target.variant("misclassified feature", words, row))
    return Part(tuple(variants), notes=tuple(notes))


def binary(design: Design) -> bool:
    """Whether the treatment is 0 or 1."""
    values = np.unique(design.X[:, design.names.index(design.treatment)])
    return set(values.tolist()) == {0.0, 1.0}
