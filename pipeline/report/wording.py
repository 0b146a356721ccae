"""Words for things that are not numbers: sets, distributions, models, shared phrases."""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Iterable, Mapping
from dataclasses import replace
from numbers import Real

import pandas as pd

from pipeline.core.estimate import ConfidenceSet, Shape, TestResult
from pipeline.core.house import INTERVAL, STANDARD_ERROR, T_VALUE, House, money_words
from pipeline.core.outcome import BASIS_POINTS, Unit
from pipeline.report.document import (
    Bracketed,
    Cell,
    Interval,
    Number,
    Piece,
    Quote,
    Text,
    Verbatim,
)
from pipeline.report.material import Material, capital
from pipeline.report.numerals import PERCENT, in_unit, plain, show, true_minus

# The convention of finance journals: 10%, 5% and 1% (common practice, no source).
STARS = (0.10, 0.05, 0.01)
STAR_WORDS = "* p < 10%, ** p < 5%, *** p < 1%, two-sided, from the degrees of freedom named here."
SET_ALONE = (
    " A coefficient whose confidence set is not made from its standard error carries no star: read "
    "the set."
)
CRITICAL_SIZE = re.compile(r"stock_yogo(_liml)?_size_(\d+)")


def spoken(key: str) -> str:
    """A key as words: underscores as spaces, the first letter a capital."""
    if size := CRITICAL_SIZE.fullmatch(key):
        which = ", limited information" if size[1] else ""
        return f"Stock–Yogo critical value{which}, {size[2]}% size"
    return capital(key.replace("_", " ").replace("r squared", "R²").strip())


def joined(words: Iterable[str]) -> str:
    """``a, b and c``."""
    found = list(words)
    return " and ".join([", ".join(found[:-1]), found[-1]] if len(found) > 1 else found)


def level_words(level: float) -> str:
    """``95%``."""
    digits = 0 if abs(level * PERCENT - round(level * PERCENT)) < 1e-9 else 1
    return f"{show(level * PERCENT, digits)}%"


def per_unit(unit: Unit) -> str:
    """The unit of a coefficient, for a heading."""
    return f"{unit.short} per unit".strip()


def axis_words(words: str, unit: Unit | str) -> str:
    """What an axis shows, its unit in brackets: that of a difference unless put in words."""
    inside = unit if isinstance(unit, str) else unit.short
    return capital(words) + (f" ({inside})" if inside else "")


def set_words(found: ConfidenceSet, digits: int, unit: Unit = BASIS_POINTS) -> str:
    """A confidence set of differences in words, for a cell."""
    ends = (show(end * unit.scale, digits) for end in (found.low, found.high))
    low, high = (f"{unit.before}{end}" for end in ends)
    match found.shape:
        case Shape.INTERVAL:
            return f"from {low} to {high}{unit.change}"
        case Shape.RAYS:
            return f"two rays: at or below {low}, or at or above {high}{unit.change}"
        case Shape.LINE:
            return "the whole line: no value is excluded"
        case Shape.EMPTY:
            return "empty: no value fits"


def set_cell(
    estimate: float, found: ConfidenceSet, digits: int, unit: Unit = BASIS_POINTS
) -> Interval:
    """A cell with an effect above its confidence set."""
    middle = in_unit(estimate, unit, digits)
    if found.shape is Shape.INTERVAL:
        low, high = (in_unit(end, unit, digits) for end in (found.low, found.high))
        return Interval(middle, low, high)
    return Interval(middle, None, None, set_words(found, digits, unit))


def coefficient_cell(
    term: Mapping[str, float], house: House, shown: Callable[[float], Number | None]
) -> Interval | Bracketed:
    """A coefficient with what the house wants in brackets under it, and its stars if any.

    ``term`` holds ``coefficient, std_error, statistic, p_value, ci_low, ci_high``; ``shown`` makes
    a cell of an amount with the digits that the standard error allows.
    """
    middle = shown(term["coefficient"])
    if middle is not None and house.stars:
        middle = replace(middle, mark=stars(term["p_value"]))
    if house.brackets == T_VALUE:
        return Bracketed(middle, plain(term["statistic"], 2))
    if house.brackets == STANDARD_ERROR:
        return Bracketed(middle, shown(term["std_error"]))
    return Interval(middle, shown(term["ci_low"]), shown(term["ci_high"]))


def stars(p: float) -> str:
    """Three, two, one or no star."""
    return "*" * sum(p < limit for limit in STARS)


def bracket_words(house: House, level: float) -> str:
    """What stands with a coefficient, for a heading."""
    return f"{level_words(level)} interval" if house.brackets == INTERVAL else house.brackets


def set_pieces(
    material: Material, name: str, digits: int, unit: Unit | None = None
) -> tuple[Piece, ...]:
    """The confidence set of a number of the headline frame, in words with quoted ends.

    In the unit of the outcome unless another one is named.
    """
    used = unit or material.unit
    frame = material.frames["headline"]
    shape = Shape(frame.loc[frame["name"] == name, "shape"].iloc[0])
    if shape is Shape.LINE:
        return ("the whole line: no value is excluded",)
    if shape is Shape.EMPTY:
        return ("empty: no value fits",)
    low, high = (
        material.number(name, end, scale=used.scale, digits=digits) for end in ("ci_low", "ci_high")
    )
    if not (math.isfinite(low.value) and math.isfinite(high.value)):
        return ("not known",)
    if shape is Shape.RAYS:
        ends = ("two rays, at or below ", used.before, low, used.change)
        return (*ends, " or at or above ", used.before, high, used.change)
    return (used.before, low, " to ", used.before, high, used.change)


def money_pieces(quoted: Quote, material: Material) -> tuple[Piece, ...]:
    """``USD −10.6 million`` of a quoted amount, as the house shows money."""
    before, after = money_words(material.study.currency, material.house.money)
    return (Verbatim(before, "study"), quoted, Verbatim(after, "study"))


def distribution_words(result: TestResult) -> str:
    """``t(430)``, ``F(2, 40)``, ``normal``: the distribution a p-value comes from."""
    kind = result.distribution.replace("chi2", "χ²")
    if not result.df:
        return kind
    inside = ", ".join(show(df, 0 if float(df).is_integer() else 1) for df in result.df)
    return f"{kind}({inside})"


def df_words(df: float) -> str:
    """Degrees of freedom as a word or a number."""
    if math.isinf(df):
        return "normal"
    return show(df, 0 if float(df).is_integer() else 1)


def window_label(label: str) -> str:
    """``[−1, +1]``."""
    return true_minus(label)


def direction(value: float) -> str:
    """Whether a number lies above or below zero, in words."""
    return "below zero" if value < 0 else "above zero" if value > 0 else "at zero"


def any_cell(value: object) -> Cell:
    """A cell of a value whose kind the frame does not promise: a number, words or a blank."""
    if value is None or isinstance(value, bool) or value is pd.NaT:
        return None if value is None or value is pd.NaT else Text("yes" if value else "no")
    if isinstance(value, Real):
        return plain(float(value))
    text = str(value).strip()
    return Text(true_minus(text)) if text and text.lower() != "nan" else None
