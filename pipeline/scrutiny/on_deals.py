"""A column of the comparison table without each deal, company, date and level of an effect."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import Diagnostic, Estimate, EstimationFailed
from pipeline.core.findings import InputProblem
from pipeline.core.prices import Booleans
from pipeline.core.scrutiny import Variant
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.least_squares import fixed_effects, ols
from pipeline.scrutiny import influence
from pipeline.scrutiny.options import HOUSE, Part, Row, ScrutinyOptions, Target, ends

SHARE_WANTED = 0.05


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
    listed: list[Row] = []
    dimensions = influence.dimensions(design, moments.kept, options.dimensions)
    for name, codes in dimensions.items():
        found = influence.leave_out(moments, codes, name)
        if len(found.groups) < 2 or np.isnan(found.effects).all():
            continue
        words = [_group(found, at, rows, codes, options) for at in range(len(found.groups))]
        listed += _listed(found, words, target, options)
        for at in dict.fromkeys(
            (int(np.nanargmin(found.effects)), int(np.nanargmax(found.effects)))
        ):
            stays = np.ones(design.n, dtype=np.bool_)
            stays[np.flatnonzero(moments.kept)[codes == found.groups[at]]] = False
            row, n = _refitted(kind, design, stays, float(found.effects[at]), options)
            dimension = f"one {options.words(name)} left out"
            variants.append(target.variant(dimension, f"without {words[at]}", row, n))
        worst = found.largest
        value = float(found.effects[worst])
        facts |= {f"without_one_{name}": value, f"without_one_{name}_change": value - found.full}
        checks.append(_one_out(target, options.words(name), found, words[worst]))
    fewest = influence.fewest_to_turn(moments, rows)
    facts |= {"fewest_deals": float(len(fewest.deals)), "fewest_share": fewest.share}
    checks.append(_fewest(target, fewest))
    tables = {"left_out": listed, "breakdowns": [_fewest_row(target, fewest)]}
    return Part(tuple(variants), tuple(checks), facts, tables=tables)


def _listed(
    found: influence.LeftOutGroups, words: Sequence[str], target: Target, options: ScrutinyOptions
) -> list[Row]:
    """One row a group, those that move the effect most first."""
    change = found.effects - found.full
    order = np.argsort(-np.nan_to_num(np.abs(change), nan=-1.0), kind="stable")
    return [
        {
            "target": target.words,
            "dimension": options.words(found.dimension),
            "group": words[at],
            "deals": int(found.sizes[at]),
            "estimate": float(found.effects[at]),
            "change": float(change[at]),
        }
        for at in order
    ]


def _group(
    found: influence.LeftOutGroups,
    at: int,
    rows: list[str],
    codes: np.ndarray,
    options: ScrutinyOptions,
) -> str:
    code = int(found.groups[at])
    names = options.groups.get(found.dimension)
    return names[code] if names is not None else influence.named_by(rows, codes, code)


def _refitted(
    kind: Kind, design: Design, stays: Booleans, effect: float, options: ScrutinyOptions
) -> tuple[tuple[float, float, float], int]:
    nan = float("nan")
    try:
        column = kind.fit(influence.rows_of(design, stays), options.fit)
    except (InputProblem, EstimationFailed):
        return (effect, nan, nan), int(stays.sum())
    return (effect, *ends(column.interval)), column.n


def _one_out(target: Target, name: str, found: influence.LeftOutGroups, words: str) -> Diagnostic:
    turned = np.nansum(found.effects * found.full <= 0)
    return target.check(
        f"Effect without {words}, the {name} that moves it most",
        float(found.effects[found.largest]),
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


def _fewest_row(target: Target, fewest: influence.Fewest) -> Row:
    return target.breakdown(
        "fewest_deals",
        f"The {target.words} keeps its sign",
        "No few deals carry the answer",
        "{} of the deals are left out, the first of them " + ", ".join(fewest.deals[:3]),
        (fewest.share if fewest.turned else math.inf, "share"),
        SHARE_WANTED,
        f"{SHARE_WANTED:.0%} of the deals, {HOUSE}",
        "After Broderick, Giordano and Meager (2020)",
    )
