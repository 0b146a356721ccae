"""Every doubt put to one run: the least-squares effect and the column that answers the question."""

from __future__ import annotations

from collections.abc import Sequence

from pipeline.core.design import Design
from pipeline.core.estimate import Column, Estimate, EstimationFailed, t_reach
from pipeline.core.scrutiny import TABLES, Contour, Direction, Scrutiny, table_frames
from pipeline.scrutiny import (
    on_choice,
    on_deals,
    on_expectations,
    on_instruments,
    on_least_squares,
    on_records,
)
from pipeline.scrutiny.directions import directions_of
from pipeline.scrutiny.ground import ground_of
from pipeline.scrutiny.options import Part, ScrutinyOptions, Target, ends

LEAST_SQUARES = {"ols": False, "fixed_effects": True}
"""Columns the omitted-variable formulas speak of -> whether effects are taken out."""


def scrutinise(
    design: Design, columns: Sequence[Column], lead: int, options: ScrutinyOptions
) -> Scrutiny:
    """What would overturn the finding.

    ``columns`` are the comparison table's, ``lead`` the index of the one that answers the
    question. Doubts about controls, hidden confounders and records are put to the lead if it is
    least squares, with or without effects, else to the first such column (or to plain least
    squares if the table has none); those about deals, anticipation and instruments to the lead
    as well. A doubt that cannot be raised here is a note; facts of the lead start with ``lead_``
    when it is not the least-squares column.

    Raises:
        InputProblem: for an option that has no answer: a benchmark that is not a control, a
            reliability, sign or probability out of range.
        EstimationFailed: if the least-squares regression itself fails.
    """
    leading = columns[lead] if 0 <= lead < len(columns) else None
    head = leading if isinstance(leading, Estimate) else None
    base = _base(columns, head)
    parts, directions, contour, reach = _on_base(design, base, head, options)
    if head is not None and (base is None or head.estimator != base.estimator):
        feature = options.words(design.treatment)
        words = f"effect of {feature}"
        target = Target(words, head.title, options.level, head.n, options.outcome)
        parts.append(_reported(head, target, lead=True))
        parts += [_led(part) for part in _on_column(head, design, target, options)]
    rows = {name: [row for part in parts for row in part.tables.get(name, ())] for name in TABLES}
    return Scrutiny(
        variants=tuple(item for part in parts for item in part.variants),
        checks=tuple(item for part in parts for item in part.checks),
        facts={name: value for part in parts for name, value in part.facts.items()},
        directions=directions,
        contour=contour,
        notes=tuple(dict.fromkeys(note for part in parts for note in part.notes)),
        tables=table_frames({**rows, "contour": on_least_squares.contour_rows(contour, reach)}),
    )


def _base(columns: Sequence[Column], head: Estimate | None) -> Estimate | None:
    """The least-squares column under scrutiny: the lead if it is one, else the first."""
    if head is not None and head.estimator in LEAST_SQUARES:
        return head
    found = [c for c in columns if isinstance(c, Estimate) and c.estimator in LEAST_SQUARES]
    return found[0] if found else None


def _on_base(
    design: Design, base: Estimate | None, head: Estimate | None, options: ScrutinyOptions
) -> tuple[list[Part], tuple[Direction, ...], Contour, float]:
    effects = LEAST_SQUARES[base.estimator] if base is not None else False
    ground = ground_of(design, options.fit, effects=effects)
    feature = options.words(design.treatment)
    leads = head is None or (base is not None and head.estimator == base.estimator)
    words = f"effect of {feature}" if leads else f"least-squares effect of {feature}"
    title = base.title if base is not None else "Least squares"
    target = Target(words, title, options.level, ground.n, options.outcome)
    parts = [
        on_least_squares.controls_left_out(design, ground, target, options, effects=effects),
        on_least_squares.strength_needed(ground, target, options),
        on_least_squares.proportional_selection(ground, target, options),
        on_records.recorded_badly(design, ground, target, options),
        on_choice.hidden_choice(design, ground, target, options),
    ]
    if base is not None:
        parts.append(_reported(base, target, lead=leads))
        parts += _on_column(base, design, target, options)
    contour = on_least_squares.contour_of(ground, options)
    reach = t_reach(options.level, ground.robust_df)
    return parts, directions_of(options.suspects, ground.estimate), contour, reach


def _reported(column: Estimate, target: Target, *, lead: bool) -> Part:
    """The number put to the doubts, as its column reports it."""
    low, high = ends(column.interval)
    row = {
        "target": target.words,
        "title": column.title,
        "lead": lead,
        "estimate": float(column.coefficients[column.names.index(column.treatment)]),
        "ci_low": low,
        "ci_high": high,
    }
    return Part(tables={"reported": [row]})


def _on_column(
    column: Estimate, design: Design, target: Target, options: ScrutinyOptions
) -> list[Part]:
    parts = []
    try:
        parts = [
            on_deals.left_out(column, design, target, options),
            on_expectations.half_known(column, design, target, options),
        ]
    except EstimationFailed as failure:
        parts.append(Part(notes=(f"{column.title}: {failure.reason}.",)))
    if "anderson_rubin" in column.sets and len(design.endogenous) > 1:
        note = "The exclusion was not varied: that is made for one instrumented variable."
        parts.append(Part(notes=(note,)))
    elif "anderson_rubin" in column.sets:
        parts += [
            on_instruments.by_another_way(column, design, target, options),
            on_instruments.unequal_variances(design, target, options),
            on_instruments.answered_by_choice(design, target, options),
        ]
    return parts


def _led(part: Part) -> Part:
    facts = {f"lead_{name}": value for name, value in part.facts.items()}
    return Part(part.variants, part.checks, facts, part.notes, part.tables)
