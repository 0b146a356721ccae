"""How numbers and codes are written: decimal marks, units of money, digits that were lost."""

from __future__ import annotations

import re
from collections.abc import Mapping
from types import MappingProxyType

import numpy as np
import pandas as pd

from pipeline.core.prices import Booleans
from pipeline.inputs.source import Source

UNITS: Mapping[str, float] = MappingProxyType(
    {"one": 1.0, "thousand": 1e3, "million": 1e6, "billion": 1e9}
)
# Digits before a decimal comma may stand in groups of three.
COMMA = re.compile(r"[+-]?(\d+|\d{1,3}([. \u00a0\u202f]\d{3})+)(,\d+)?([eE][+-]?\d+)?")
MAYBE_COMMA = re.compile(r"[+-]?[\d. \u00a0\u202f]*,\d+")
GROUPS = str.maketrans({".": None, " ": None, "\u00a0": None, "\u202f": None, ",": "."})
# What a spreadsheet leaves of a long code: rounded to 15 digits, or shown as a power of ten.
POWER = r"\d(\.\d+)?[eE]\+\d+"
EXACT = 1e15


def with_points(raw: pd.Series, source: Source) -> pd.Series:
    """Text cells of a column of numbers with decimal points, where a comma was declared.

    A cell that fits no such number is left as it is, and marked so that it is refused.
    """
    if source.decimal != ",":
        return raw
    return raw.map(_pointed, na_action="ignore") if raw.dtype.kind in "OTU" else raw


def _pointed(cell: object) -> object:
    if not isinstance(cell, str):
        return cell
    text = cell.strip()
    if COMMA.fullmatch(text):
        return text.translate(GROUPS)
    return f"{text} (no number with a decimal comma)" if re.search(r"\d", text) else cell


def comma_remedy(cells: pd.Series, source: Source) -> str:
    """What to do about cells that look like numbers with a decimal comma; '' if none does."""
    if source.decimal or not any(MAYBE_COMMA.fullmatch(str(cell).strip()) for cell in cells):
        return ""
    return f"If the comma is the decimal mark, set inputs.source.{source.table}.decimal = ','."


def lost_digits(raw: pd.Series) -> Booleans:
    """Which cells of a column of codes are what a spreadsheet leaves of a long number."""
    if raw.dtype.kind == "f":
        return np.asarray(raw.abs().to_numpy() >= EXACT)
    if raw.dtype.kind in "iubM":
        return np.zeros(len(raw), dtype=np.bool_)
    numbers = raw.map(lambda cell: isinstance(cell, int | float) and abs(cell) >= EXACT)
    powers = raw.astype(str).str.fullmatch(POWER)
    return np.asarray(numbers.fillna(False).astype(bool) | powers.fillna(False).astype(bool))


def scaled(table: pd.DataFrame, source: Source) -> pd.DataFrame:
    """The typed table with its money in the study's unit."""
    for name, factor in source.factors.items():
        values = table[name].to_numpy(np.float64)
        # Dividing by a whole number rounds once; multiplying by its inverse rounds twice.
        table[name] = values * factor if factor >= 1 else values / round(1 / factor)
    return table
