"""Lines for a deal list that holds its outcome, and those of the regression either way."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence

import numpy as np

from pipeline.core.outcome import UNITS
from pipeline.drafting.features import (
    ROWS,
    Choice,
    Regressors,
    choice_of,
    groups_of,
    numbers,
    outcome_of,
    regressors_of,
    repeated_company,
)
from pipeline.drafting.kinds import Recognised
from pipeline.drafting.lines import Line
from pipeline.drafting.signs import dated
from pipeline.inputs.units import unit_doubt

TREATMENT = "regression.treatment"
HINT = (
    "A control that moves the choice and reaches the outcome in no other way is an instrument: "
    "move it to [instruments] with your argument, see configs/every_key.toml. Likewise what moves "
    "only the decision to announce belongs to [selection], with a table of candidates."
)
NO_FEATURE = (
    "No [regression]: no column of 0 and 1 with five deals of each was found. Add one for the "
    "feature the committee can choose, and draft again."
)


def outcome_lines(deals: Recognised, answers: Mapping[str, object]) -> list[Line]:
    """The outcome with its unit, and the regression."""
    asked = answers.get("outcome.column")
    column, others = outcome_of(deals)
    column = str(asked) if asked in deals.found.signs else column
    if not column:
        listed = ", ".join(others[:6])
        return [
            Line("outcome", "column", None, "which column holds what is to be explained? No name "
                 f"says so. Columns of numbers: {listed}.", example=f'"{next(iter(others), "")}"'),
            Line("outcome", "unit", None, "in which unit are its cells? One of "
                 + ", ".join(UNITS) + ".", example='"percent"'),
        ]  # fmt: skip
    reason = f"its name speaks of an outcome ('{column}'), and its cells are numbers"
    reason += f"; so do {', '.join(others)}" if others else ""
    lines = [Line("outcome", "column", column, reason[0].upper() + reason[1:] + ".",
                  doubtful=bool(others)), _unit_line(deals, column)]  # fmt: skip
    if deals.column("announced_at"):
        lines.append(Line("outcome", "date", deals.column("announced_at"),
                          "Deals of one date are taken to move together."))  # fmt: skip
    spare = [name for name in deals.others if name != column]
    return regression(lines, deals, spare, (), answers)


def _unit_line(deals: Recognised, column: str) -> Line:
    """The unit if the size of the cells leaves one alone, else a question."""
    values = numbers(deals, column)
    fit = [key for key, unit in UNITS.items() if unit.relative and not unit_doubt(values, unit)]
    known = values[np.isfinite(values)]
    size = (
        f"cells from {known.min():,.4g} to {known.max():,.4g}, half below {np.median(known):,.4g}"
    )
    if len(fit) == 1:
        return Line("outcome", "unit", fit[0], f"{size[0].upper()}{size[1:]}: of the units of "
                    f"shares only {fit[0]} gives such numbers. Money and plain numbers were not "
                    "considered.", doubtful=True)  # fmt: skip
    listed = ", ".join(fit or UNITS)
    return Line("outcome", "unit", None, f"{size}, may be in any of: {listed}. Which one is it?",
                example=f'"{(fit or list(UNITS))[0]}"')  # fmt: skip


def regression(
    lines: list[Line],
    deals: Recognised,
    spare: Sequence[str],
    measured: Sequence[Line],
    answers: Mapping[str, object],
) -> list[Line]:
    """``lines`` and those of [regression]; a comment without a feature or with too few deals.

    Args:
        lines: what the study holds so far.
        deals: the deal list.
        spare: its columns that play no other part.
        measured: characteristics made from prices.
        answers: the analyst's own.
    """
    room = (len(deals.found.frame) - ROWS[0]) // ROWS[1] - 2  # constant and feature come first
    asked = answers.get(TREATMENT)
    choice = choice_of(deals, spare)
    if isinstance(asked, str) and asked in deals.found.signs:
        choice = Choice(asked, "Your own answer.")
    if choice is None:
        return [*lines, Line("", "", "", NO_FEATURE)]
    if room < 0:
        rows = f"{len(deals.found.frame)} deals, and it wants {ROWS[0]} and {ROWS[1]} a coefficient"
        return [*lines, Line("", "", "", f"No [regression]: the list has {rows}.")]
    names = list(dict.fromkeys(line.section.split(".")[1] for line in measured))
    found = regressors_of(deals, spare, choice, names[:room], room)
    kept = [line for line in measured if line.section.split(".")[1] in found.controls]
    return [
        *lines,
        *kept,
        *_indicator(choice),
        *found.lines,
        *_sides(choice, found, asked=TREATMENT in answers),
        *_groups(deals, spare, choice, room - len(found.controls)),
    ]


def _sides(choice: Choice, found: Regressors, *, asked: bool) -> Iterator[Line]:
    """The feature and the controls."""
    others = f" Others that would do: {', '.join(choice.others[:6])}." if choice.others else ""
    reason = f"{choice.reason}{others} Only you know what the committee can choose."
    yield Line("regression", "treatment", choice.name, reason, doubtful=not asked)
    left = "; ".join(f"{name}: {why}" for name, why in found.left) or "nothing"
    reason = (
        "What is held fixed: known before the announcement, filled, and not told by the others. "
        f"Left out: {left}."
    )
    yield Line("regression", "controls", list(found.controls), reason)
    yield Line("regression", "", "", HINT)


def _groups(deals: Recognised, spare: Sequence[str], choice: Choice, room: int) -> Iterator[Line]:
    """Fixed effects and clusters, where the list is large enough for them."""
    effects = list(groups_of(deals, [name for name in spare if name != choice.column]))
    reason = "Groups of at least ten deals on average." if effects else ""
    if _years(deals) > 1 and len(deals.found.frame) >= ROWS[0] * _years(deals):
        effects.append("year")
        reason += " Years take out what moved all deals of a year."
    if effects and room >= 0:
        yield Line("regression", "fixed_effects", effects, reason.strip())
    if repeated_company(deals):
        reason = "Companies have several deals, which share shocks."
        yield Line("regression", "clusters", ["security"], reason)


def _years(deals: Recognised) -> int:
    """Calendar years that the deals span; 0 if nothing tells."""
    if deals.column("year"):
        return deals.found.signs[deals.column("year")].distinct
    column = deals.column("announced_at")
    if not column:
        return 0
    days = dated(deals.found.frame[column], deals.found.signs[column].dating)
    return int(days.dropna().dt.year.nunique())


def _indicator(choice: Choice) -> list[Line]:
    if not choice.column:
        return []
    section = f"characteristics.{choice.name}"
    condition = {"column": choice.column, "equals": choice.word}
    return [Line(section, "indicator", condition, choice.reason)]
