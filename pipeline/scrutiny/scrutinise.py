"""Every doubt put to one run: the least-squares effect and the column that answers the question."""

from __future__ import annotations

from collections.abc import Sequence

from pipeline.core.design import Design
from pipeline.core.estimate import Column, Estimate, EstimationFailed
from pipeline.core.scrutiny import Contour, Direction, Scrutiny
from pipeline.scrutiny import on_lead, on_least_squares
from pipeline.scrutiny.directions import directions_of
from pipeline.scrutiny.ground import ground_of
from pipeline.scrutiny.options import Part, ScrutinyOptions, Target

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
    parts, directions, contour = _on_base(design, base, head, options)
    if head is not None and (base is None or head.estimator != base.estimator):
        feature = options.words(design.treatment)
        target = Target(f"effect of {feature}", head.title, options.level, head.n)
        parts += [_led(part) for part in _on_column(head, design, target, options)]
    return Scrutiny(
        variants=tuple(item for part in parts for item in part.variants),
        checks=tuple(item for part in parts for item in part.checks),
        facts={name: value for part in parts for name, value in part.facts.items()},
        directions=directions,
        contour=contour,
        notes=tuple(dict.fromkeys(note for part in parts for note in part.notes)),
    )


def _base(columns: Sequence[Column], head: Estimate | None) -> Estimate | None:
    """The least-squares column under scrutiny: the lead if it is one, else the first."""
    if head is not None and head.estimator in LEAST_SQUARES:
        return head
    found = [c for c in columns if isinstance(c, Estimate) and c.estimator in LEAST_SQUARES]
    return found[0] if found else None


def _on_base(
    design: Design, base: Estimate | None, head: Estimate | None, options: ScrutinyOptions
) -> tuple[list[Part], tuple[Direction, ...], Contour]:
    effects = LEAST_SQUARES[base.estimator] if base is not None else False
    ground = ground_of(design, options.fit, effects=effects)
    feature = options.words(design.treatment)
    leads = head is None or (base is not None and head.estimator == base.estimator)
    words = f"effect of {feature}" if leads else f"least-squares effect of {feature}"
    target = Target(
        words, base.title if base is not None else "Least squares", options.level, ground.n
    )
    parts = [
        on_least_squares.controls_left_out(design, ground, target, options, effects=effects),
        on_least_squares.strength_needed(ground, target, options),
        on_least_squares.proportional_selection(ground, target, options),
        on_least_squares.recorded_badly(design, ground, target, options),
        on_least_squares.hidden_choice(design, ground, target, options),
    ]
    if base is not None:
        parts += _on_column(base, design, target, options)
    contour = on_least_squares.contour_of(ground, options)
    return parts, directions_of(options.suspects, ground.estimate), contour


def _on_column(
    column: Estimate, design: Design, target: Target, options: ScrutinyOptions
) -> list[Part]:
    parts = []
    try:
        parts = [
            on_lead.left_out(column, design, target, options),
            on_lead.half_known(column, design, target, options),
        ]
    except EstimationFailed as failure:
        parts.append(Part(notes=(f"{column.title}: {failure.reason}.",)))
    if "anderson_rubin" in column.sets:
        parts += [
            on_lead.by_another_way(column, design, target, options),
            on_lead.unequal_variances(design, target, options),
        ]
    return parts


def _led(part: Part) -> Part:
    facts = {f"lead_{name}": value for name, value in part.facts.items()}
    return Part(part.variants, part.checks, facts, part.notes)
