"""Whether the cells of an outcome have the size that their declared unit would give them.

A unit mistaken by a factor of a hundred leaves every t statistic as it is and makes every printed
number wrong. The limits are common practice, no source: an outcome passes if one deal in ten moves
by more than a hundredth of the amount it is a share of, and half of them by less than all of it.
"""

from __future__ import annotations

import numpy as np

from pipeline.core.outcome import Unit
from pipeline.core.prices import Floats

FEWEST = 5
SMALL, LARGE = 0.01, 1.0
RATIO = (0.5, 0.9, 2.0)
ERROR_SMALL, ERROR_LARGE = 0.001, 10.0
Doubt = tuple[str, str, str]


def unit_doubt(values: Floats, unit: Unit) -> Doubt | None:
    """What was found, what was expected and what to do; None if the unit fits or cannot be told.

    Args:
        values: (n,) cells as given, NaN where empty.
        unit: as declared.
    """
    found = values[np.isfinite(values)]
    if not unit.relative or len(found) < FEWEST:
        return None
    shares = unit.stored(found)
    typical, most = (float(np.quantile(np.abs(shares), q)) for q in (0.5, 0.9))
    expected = f"cells in {unit.key}"
    remedy = "Correct outcome.unit, or set outcome.unit_is_certain = true if it is right."
    size = f"cells from {found.min():,.4g} to {found.max():,.4g}, half of them below "
    size += f"{np.median(found):,.4g}"
    if unit.zero == 0 and _like_ratios(found):
        return f"{size}, the size of price ratios (1.35 for a premium of 35%)", expected, remedy
    if unit.zero and (found.min() <= 0 or np.median(found) < RATIO[0]):
        return f"{size}, where a price ratio of 1 means no change", expected, remedy
    if most < SMALL:
        return f"{size}, too small for {unit.key}", expected, remedy
    if typical > LARGE:
        return f"{size}, too large for {unit.key}", expected, remedy
    return None


def _like_ratios(found: Floats) -> bool:
    least, low, high = RATIO
    return bool(found.min() > least and low < np.median(found) < high)


def error_scale(values: Floats, errors: Floats) -> Doubt | None:
    """A doubt about standard errors that are no match for the spread of what they belong to."""
    used = np.isfinite(values) & np.isfinite(errors)
    spread = float(np.std(values[used])) if used.sum() >= FEWEST else 0.0
    if spread == 0:
        return None
    ratio = float(np.median(errors[used])) / spread
    if ERROR_SMALL <= ratio <= ERROR_LARGE or not errors[used].any():
        return None
    return (
        f"standard errors of about {ratio:,.3g} times the outcome's standard deviation",
        f"{ERROR_SMALL:g} to {ERROR_LARGE:g} times",
        "Check that both columns are in the same unit.",
    )
