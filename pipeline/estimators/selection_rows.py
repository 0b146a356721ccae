"""The candidates of a selection model, refused where no such model may be made of them."""

from __future__ import annotations

import numpy as np

from pipeline.core.design import Design, SelectionRows
from pipeline.estimators.algebra import dependent, refusal


def candidates_of(design: Design) -> SelectionRows:
    """The candidates.

    Raises:
        InputProblem: ``no_selection`` if the design has none.
    """
    selection = design.selection
    if selection is None:
        raise refusal(
            "no_selection",
            "selection",
            "no candidates",
            "a table of candidates",
            "declare which companies could have announced a deal",
        )
    return selection


def checked_selection(design: Design) -> SelectionRows:
    """The candidates, if a selection model may be made of them.

    Raises:
        InputProblem: ``no_selection``, ``unknown_exclusion``, ``excluded_is_control``,
            ``selection_rows``.
    """
    selection = candidates_of(design)
    unknown = [name for name in selection.excluded if name not in selection.names]
    if unknown:
        raise refusal(
            "unknown_exclusion",
            ", ".join(unknown),
            "not in the selection equation",
            "excluded variables among those that explain announcing",
            "add it there",
        )
    both = [name for name in selection.excluded if name in design.names]
    if both:
        raise refusal(
            "excluded_is_control",
            ", ".join(both),
            "excluded, yet a regressor of the outcome",
            "a variable that moves announcing and not the outcome",
            "take it out of one of the two",
        )
    check_rows(design, selection)
    _check_exclusion(design, selection)
    return selection


def _check_exclusion(design: Design, selection: SelectionRows) -> None:
    """Refuse excluded variables that are regressors of the outcome under another name."""
    chosen = selection.selected
    X, W = design.X[selection.outcome_row[chosen]], selection.W[chosen]
    at = [selection.names.index(name) for name in selection.excluded]
    both = np.column_stack([X, W[:, at]])
    if not at or len(both) <= both.shape[1] or dependent(X, design.names):
        return
    # The outcome's regressors come first: one name may stand in both equations.
    labels = (*(f"outcome: {name}" for name in design.names), *selection.excluded)
    guilty = dependent(both, labels)
    varies = dict(zip(labels, np.ptp(both, axis=0) > 0, strict=True))
    excluded = [name for name in guilty if name in selection.excluded and varies[name]]
    controls = [
        name for name in design.names if f"outcome: {name}" in guilty and varies[f"outcome: {name}"]
    ]
    if excluded and controls:
        raise refusal(
            "excluded_is_control",
            ", ".join(excluded),
            f"excluded, yet on the deals a combination of {', '.join(controls)}, "
            f"regressor{'' if len(controls) == 1 else 's'} of the outcome",
            "a variable that moves announcing and not the outcome",
            "take it out of one of the two",
        )


def check_rows(design: Design, selection: SelectionRows) -> None:
    """Refuse unless each of the n deals is the deal of one selected candidate, and no other.

    Raises:
        InputProblem: ``selection_rows``.
    """
    rows = selection.outcome_row[selection.selected]
    found = np.bincount(rows[(rows >= 0) & (rows < design.n)], minlength=design.n)
    stray = int((rows < 0).sum() + (rows >= design.n).sum())
    if stray or (found != 1).any():
        lost, twice = int((found == 0).sum()), int((found > 1).sum())
        raise refusal(
            "selection_rows",
            "candidates",
            f"{lost} deals without a candidate, {twice} with several, {stray} without a deal",
            "one selected candidate a deal",
            "match the candidates to the deals",
        )
