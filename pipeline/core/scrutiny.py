"""What it would take to overturn the finding: one answer under every assumption, with names."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field

import pandas as pd

from pipeline.core.estimate import Diagnostic
from pipeline.core.prices import Floats
from pipeline.core.tables import typed_frame

SENSITIVITY_COLUMNS = {
    "target": "str",
    "dimension": "str",
    "variant": "str",
    "estimate": "float64",
    "ci_low": "float64",
    "ci_high": "float64",
    "n": "int64",
}
DIRECTION_COLUMNS = {
    "factor": "str",
    "on_outcome": "str",
    "on_treatment": "str",
    "bias": "str",
    "true_effect": "str",
    "evidence": "str",
}
LEFT_OUT = "left_out"
TABLES: Mapping[str, Mapping[str, str]] = {
    "reported": {
        "target": "str",
        "title": "str",
        "lead": "bool",
        "estimate": "float64",
        "ci_low": "float64",
        "ci_high": "float64",
    },
    "breakdowns": {
        "key": "str",
        "target": "str",
        "statement": "str",
        "assumption": "str",
        "needed": "str",
        "value": "float64",
        "unit": "str",
        "wanted": "float64",
        "compared": "str",
        "verdict": "str",
        "source": "str",
    },
    "controls_left_out": {
        "control": "str",
        "short": "float64",
        "long": "float64",
        "gamma": "float64",
        "delta": "float64",
        "gap": "float64",
    },
    "hidden_strengths": {
        "control": "str",
        "multiple": "float64",
        "with_treatment": "float64",
        "with_outcome": "float64",
        "estimate": "float64",
        "ci_low": "float64",
        "ci_high": "float64",
        "note": "str",
    },
    "contour": {
        "with_treatment": "float64",
        "with_outcome": "float64",
        "estimate": "float64",
        "statistic": "float64",
        "reach": "float64",
        "label": "str",
    },
    "largest_r2": {
        "rule": "str",
        "largest_r2": "float64",
        "strength_for_zero": "float64",
        "estimate": "float64",
        "ci_low": "float64",
        "ci_high": "float64",
        "approximation": "float64",
        "roots": "str",
        "note": "str",
    },
    "extrapolation": {
        "variable": "str",
        "curve": "str",
        "zeta": "float64",
        "estimate": "float64",
    },
    "violations": {
        "kind": "str",
        "share": "float64",
        "ci_low": "float64",
        "ci_high": "float64",
    },
    "expectations": {
        "target": "str",
        "known_before": "float64",
        "completion": "float64",
        "estimate": "float64",
        "ci_low": "float64",
        "ci_high": "float64",
    },
    "left_out": {
        "target": "str",
        "dimension": "str",
        "group": "str",
        "deals": "int64",
        "estimate": "float64",
        "change": "float64",
    },
    "both_ways": {
        "equation": "str",
        "method": "str",
        "term": "str",
        "coefficient": "float64",
        "std_error": "float64",
        "p_value": "float64",
        "ci_low": "float64",
        "ci_high": "float64",
        "n": "int64",
    },
}
"""Frames of a scrutiny beside its variants -> columns; effects are decimal, shares fractions.

``reported`` holds the numbers put to the doubts as their columns report them, and which leads.
``breakdowns`` says for each statement what would need to be true for it to fall: ``needed`` is a
clause with ``{}`` where ``value`` belongs, in ``unit`` (``share``, ``times``,
``correlation`` or ``odds``); ``verdict`` is ``holds`` if it lies beyond ``wanted``, else ``gives``.
"""


@dataclass(frozen=True, slots=True)
class Variant:
    """One number of the study under one assumption.

    Attributes:
        target: what the number is, in words, e.g. ``effect of paid in shares``.
        dimension: the kind of doubt, e.g. ``omitted variable``.
        variant: the assumption, in words.
        estimate: decimal, in the outcome's unit per unit of the treatment.
        ci_low, ci_high: interval at the study's level, decimal; infinite when unbounded, NaN when
            the assumption gives a number without an interval.
        n: deals behind it.
    """

    target: str
    dimension: str
    variant: str
    estimate: float
    ci_low: float
    ci_high: float
    n: int


@dataclass(frozen=True, slots=True)
class Direction:
    """Which way one suspected flaw pushes the least-squares effect.

    Signs are ``+``, ``-``, ``0`` or ``?``; ``bias`` likewise. ``true_effect`` says in words
    whether the true effect is larger or smaller than the estimate; ``evidence`` is the analyst's.
    """

    factor: str
    on_outcome: str
    on_treatment: str
    bias: str
    true_effect: str
    evidence: str


@dataclass(frozen=True, slots=True, eq=False)
class Contour:
    """The adjusted effect for confounders of every strength, and where named controls lie.

    Attributes:
        with_treatment: (a,) partial R² of the confounder with the treatment.
        with_outcome: (b,) partial R² with the outcome.
        estimates: (b, a) adjusted effect, decimal.
        statistics: (b, a) its t statistic.
        points: words -> (with treatment, with outcome, adjusted effect).
    """

    with_treatment: Floats
    with_outcome: Floats
    estimates: Floats
    statistics: Floats
    points: Mapping[str, tuple[float, float, float]]


@dataclass(frozen=True, slots=True, eq=False)
class Scrutiny:
    """Everything the scrutiny of one run found.

    Attributes:
        variants: the answer under every assumption.
        checks: what was found against what was hoped for.
        facts: name -> number, for prose.
        directions: suspected flaws and the way each pushes.
        contour: confounders of every strength.
        notes: sentences a reader must see.
        tables: name -> frame, those of :data:`TABLES` that have rows.
    """

    variants: tuple[Variant, ...]
    checks: tuple[Diagnostic, ...]
    facts: Mapping[str, float]
    directions: tuple[Direction, ...] = ()
    contour: Contour | None = None
    notes: tuple[str, ...] = field(default=())
    tables: Mapping[str, pd.DataFrame] = field(default_factory=dict)


def sensitivity_frame(variants: Iterable[Variant]) -> pd.DataFrame:
    """One row an assumption: ``target, dimension, variant, estimate, ci_low, ci_high, n``."""
    rows = [{name: getattr(item, name) for name in SENSITIVITY_COLUMNS} for item in variants]
    return typed_frame(rows, SENSITIVITY_COLUMNS)


def table_frames(rows: Mapping[str, Iterable[Mapping[str, object]]]) -> dict[str, pd.DataFrame]:
    """The frames of :data:`TABLES` that have rows, in the order declared there."""
    found = {name: list(rows.get(name, ())) for name in TABLES}
    return {name: typed_frame(part, TABLES[name]) for name, part in found.items() if part}


def with_rows(
    name: str, rows: Iterable[Mapping[str, object]], frame: pd.DataFrame | None
) -> pd.DataFrame | None:
    """A frame of :data:`TABLES` with these rows before its own; None if there are neither."""
    first = table_frames({name: rows}).get(name)
    parts = [part for part in (first, frame) if part is not None]
    return pd.concat(parts, ignore_index=True) if parts else None


def together(mean: pd.DataFrame | None, variants: Iterable[Variant]) -> pd.DataFrame:
    """The variants of the mean reaction, if there are any, then those of the feature's effect."""
    others = sensitivity_frame(variants)
    if mean is None:
        return others
    return mean if others.empty else pd.concat([mean, others], ignore_index=True)


def direction_frame(directions: Iterable[Direction]) -> pd.DataFrame:
    """One row a suspected flaw: ``factor, on_outcome, on_treatment, bias, ...``."""
    rows = [{name: getattr(item, name) for name in DIRECTION_COLUMNS} for item in directions]
    return typed_frame(rows, DIRECTION_COLUMNS)
