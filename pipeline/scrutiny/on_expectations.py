"""A column of the comparison table if the news was half known, might not close, or came earlier."""

from __future__ import annotations

import numpy as np

from pipeline.core.design import Design
from pipeline.core.estimate import Estimate
from pipeline.core.prices import Booleans
from pipeline.core.scrutiny import Variant
from pipeline.estimators.absorb import without_singletons
from pipeline.scrutiny import mismeasured
from pipeline.scrutiny.anticipation import Expected, unanticipated
from pipeline.scrutiny.options import Part, Row, ScrutinyOptions, Target, ends


def half_known(column: Estimate, design: Design, target: Target, options: ScrutinyOptions) -> Part:
    """News expected in part, deals that may not close, announcements on the wrong day."""
    variants = []
    effect = float(column.coefficients[column.names.index(column.treatment)])
    low, high = ends(column.interval)
    for share in options.misplaced:
        words = f"{share:.0%} of the announcements on days outside the window"
        row = mismeasured.rescaled(effect, low, high, 1 - share)
        variants.append(target.variant("announcement day", words, row))
    rows = _grid(effect, (low, high), target, options)
    for known, completion in _corners(options):
        share = completion * (1 - known)
        words = _alike(known, completion)
        row = mismeasured.rescaled(effect, low, high, share)
        variants.append(target.variant("anticipation", words, row))
    unequal, notes = _unequal(column, design, target, options)
    return Part((*variants, *unequal), notes=notes, tables={"expectations": rows})


def _grid(
    effect: float, reach: tuple[float, float], target: Target, options: ScrutinyOptions
) -> list[Row]:
    """The effect behind the announcement for every pair of what was known and what may close.

    With the same share p known of all deals and the chance c to close, the announcement moved the
    price by c(1 - p) of the value, and so it did the effect (Malatesta and Thompson 1985).
    """
    rows: list[Row] = []
    for known in options.known_before:
        for completion in options.completion:
            share = completion * (1 - known)
            value, low, high = mismeasured.rescaled(effect, *reach, share)
            rows.append(
                {
                    "target": target.words,
                    "known_before": known,
                    "completion": completion,
                    "estimate": value,
                    "ci_low": low,
                    "ci_high": high,
                }
            )
    return rows


def _corners(options: ScrutinyOptions) -> list[tuple[float, float]]:
    """Most known and least likely to close, each alone and both at once."""
    known = max(options.known_before, default=0.0)
    completion = min(options.completion, default=1.0)
    found = [(known, 1.0), (0.0, completion), (known, completion)]
    return list(dict.fromkeys(pair for pair in found if pair != (0.0, 1.0)))


def _alike(known: float, completion: float) -> str:
    words = [f"{known:.0%} of the news known before"] if known else []
    words += [f"{completion:.0%} chance to close"] if completion < 1 else []
    return ", ".join(words)


def _unequal(
    column: Estimate, design: Design, target: Target, options: ScrutinyOptions
) -> tuple[list[Variant], tuple[str, ...]]:
    if not options.expected:
        return [], ()
    kept = kept_rows(column, design)
    if kept is None:
        note = f"{column.title}: unequal anticipation was not tried, the column has no scores."
        return [], (note,)
    variants = []
    for chances in options.expected:
        row = unanticipated(column, design, kept, chances, options.level)
        words = _expected(chances, options.words(design.treatment))
        variants.append(target.variant("anticipation", words, row))
    return variants, ()


def _expected(chances: Expected, feature: str) -> str:
    words = (
        f"{chances.treated:.0%} of the news known before if {feature}, "
        f"{chances.untreated:.0%} if not"
    )
    return words + (f", {chances.completion:.0%} chance to close" if chances.completion < 1 else "")


def kept_rows(column: Estimate, design: Design) -> Booleans | None:
    """(n,) rows of the design that ``column.scores`` speaks of; None if they cannot be told."""
    if column.scores is None:
        return None
    everything = np.ones(design.n, dtype=np.bool_)
    if len(column.scores) == design.n:
        return everything
    if design.effects:
        kept = without_singletons(design.effects)
        if len(column.scores) == kept.sum():
            return kept
    return None
