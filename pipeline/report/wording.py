"""Words for things that are not numbers: sets, distributions, models, shared phrases."""

from __future__ import annotations

import math
from collections.abc import Iterable
from numbers import Real

import pandas as pd

from pipeline.core.estimate import ConfidenceSet, Shape, TestResult
from pipeline.report.document import Cell, Interval, Piece, Quote, Text, Verbatim
from pipeline.report.material import Material, capital
from pipeline.report.numerals import BP, PERCENT, bp, plain, show, true_minus


def spoken(key: str) -> str:
    """A key as words: underscores as spaces, the first letter a capital."""
    return capital(key.replace("_", " ").replace("r squared", "R²").strip())


def joined(words: Iterable[str]) -> str:
    """``a, b and c``."""
    found = list(words)
    return " and ".join([", ".join(found[:-1]), found[-1]] if len(found) > 1 else found)


def level_words(level: float) -> str:
    """``95%``."""
    digits = 0 if abs(level * PERCENT - round(level * PERCENT)) < 1e-9 else 1
    return f"{show(level * PERCENT, digits)}%"


def set_words(found: ConfidenceSet, digits: int, scale: float = BP, unit: str = "bp") -> str:
    """A confidence set in words, for a cell."""
    low, high = (show(end * scale, digits) for end in (found.low, found.high))
    match found.shape:
        case Shape.INTERVAL:
            return f"from {low} to {high} {unit}"
        case Shape.RAYS:
            return f"two rays: at or below {low}, or at or above {high} {unit}"
        case Shape.LINE:
            return "the whole line: no value is excluded"
        case Shape.EMPTY:
            return "empty: no value fits"


def set_cell(estimate: float, found: ConfidenceSet, digits: int) -> Interval:
    """A cell with an effect above its confidence set, in basis points."""
    if found.shape is Shape.INTERVAL:
        return Interval(bp(estimate, digits), bp(found.low, digits), bp(found.high, digits))
    return Interval(bp(estimate, digits), None, None, set_words(found, digits))


def set_pieces(
    material: Material, name: str, digits: int, scale: float = BP, unit: str = " bp"
) -> tuple[Piece, ...]:
    """The confidence set of a number of the headline frame, in words with quoted ends."""
    frame = material.frames["headline"]
    shape = Shape(frame.loc[frame["name"] == name, "shape"].iloc[0])
    if shape is Shape.LINE:
        return ("the whole line: no value is excluded",)
    if shape is Shape.EMPTY:
        return ("empty: no value fits",)
    low, high = (
        material.number(name, side, scale=scale, digits=digits) for side in ("ci_low", "ci_high")
    )
    if not (math.isfinite(low.value) and math.isfinite(high.value)):
        return ("not known",)
    if shape is Shape.RAYS:
        return ("two rays, at or below ", low, unit, " or at or above ", high, unit)
    return (low, " to ", high, unit)


def money_pieces(quoted: Quote, currency: str) -> tuple[Piece, ...]:
    """``USD −10.6 million`` of a quoted amount and ``USD million``."""
    unit, _, scale = currency.partition(" ")
    after = Verbatim(f" {scale}" if scale else "", "study")
    return (Verbatim(f"{unit} ", "study"), quoted, after)


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
