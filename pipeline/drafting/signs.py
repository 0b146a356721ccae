"""What the cells of a column show by themselves, before its name is looked at."""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from functools import lru_cache
from zoneinfo import available_timezones

import numpy as np
import pandas as pd

from pipeline.drafting.dates import Dating, dating_of
from pipeline.inputs.codes import CHECKS
from pipeline.inputs.contracts import READ, is_missing, read_dates
from pipeline.inputs.rates import LARGE, SMALL
from pipeline.returns.sessions import known_exchanges

SAMPLE = 3_000
NEARLY_ALL, NEARLY_UNIQUE = 0.95, 0.98
YEARS = (1950.0, 2100.0)
SERIAL_RANGE = (20_000.0, 60_000.0)
CURRENCIES = (
    SMALL | LARGE | {"SEK", "NOK", "DKK", "PLN", "CZK", "NZD", "SGD", "HKD", "CNY", "ZAR", "BRL"}
    | {"MXN", "TRY", "ILS", "GBX", "GBP", "AED", "SAR", "MYR", "PHP", "RON", "BGN", "ARS"}
)  # fmt: skip
COMMA = "numbers with a decimal comma"
COMMA_NUMBER = re.compile(r"[-+(]?(\d{1,3}([. \u00a0]\d{3})+|\d+),\d+\)?%?")
DRESSED = re.compile(
    r"[-+(]?\s*[$€£¥]?\s*\d[\d,.' \u00a0]*\s*(%|bn|mn|m|k|million|billion|[$€£¥])?\s*\)?", re.I
)


@dataclass(frozen=True, slots=True)
class Signs:
    """What one column shows.

    Attributes:
        name: as read: lower case, spaces as underscores.
        kind: ``date``, ``number``, ``text`` or ``empty``.
        filled: share of cells with a value.
        rows, distinct: counts; ``unique`` says that hardly any two filled
            cells are alike.
        code: ``isin``, ``cusip``, ``sedol``, ``exchange``, ``currency`` or ``zone`` where nearly
            all cells are such codes, '' otherwise.
        low, middle, high, spread: least, median, greatest and standard deviation of numbers.
        whole: whether all numbers are integers; ``flag`` whether they are 0 and 1 alone.
        counted: whether the cells count the rows, 1, 2, 3 and so on.
        dating: how dates are written, for a column of dates.
        trouble: why the readers would refuse a column that looks like numbers; '' if not.
        levels: the distinct words of a text of few, the commonest first.
    """

    name: str
    kind: str
    filled: float
    rows: int
    distinct: int
    unique: bool
    code: str = ""
    low: float = float("nan")
    middle: float = float("nan")
    high: float = float("nan")
    spread: float = float("nan")
    whole: bool = False
    flag: bool = False
    counted: bool = False
    dating: Dating = field(default_factory=Dating)
    trouble: str = ""
    levels: tuple[str, ...] = ()

    @property
    def is_year(self) -> bool:
        """Whether the numbers are calendar years."""
        return (
            self.kind == "number" and self.whole and YEARS[0] <= self.low <= self.high <= YEARS[1]
        )

    @property
    def varies(self) -> bool:
        """Whether there is more than one value."""
        return self.distinct > 1


def signs_of(name: str, raw: pd.Series) -> Signs:
    """The signs of a column, from all of its cells for counts and from a sample for the rest."""
    missing = is_missing(raw)
    present = raw[~missing]
    if present.empty:
        return Signs(name, "empty", 0.0, len(raw), 0, False)
    distinct = int(present.nunique())
    base = Signs(
        name,
        "text",
        len(present) / len(raw),
        len(raw),
        distinct,
        distinct >= NEARLY_UNIQUE * len(present),
    )
    step = max(1, len(present) // SAMPLE)
    some = present.iloc[::step]
    dating = dating_of(name, some)
    if dating is not None:
        return replace(base, kind="date", dating=dating)
    if not pd.api.types.is_datetime64_any_dtype(raw):
        values, bad = READ["number"](present if len(present) <= SAMPLE else some)
        if not bad.any():
            return _numbers(base, values.to_numpy(np.float64), present)
    return _text(base, some.astype(str).str.strip(), present)


def _numbers(base: Signs, values: np.ndarray, present: pd.Series) -> Signs:
    whole = bool((values == np.round(values)).all())
    counts = len(values) == len(present) > 2 and bool((np.diff(values) == 1).all())
    return replace(
        base,
        kind="number",
        low=float(values.min()),
        middle=float(np.median(values)),
        high=float(values.max()),
        spread=float(values.std()),
        whole=whole,
        flag=set(np.unique(values)) == {0.0, 1.0},
        counted=counts and values[0] in (0.0, 1.0),
    )


def _text(base: Signs, words: pd.Series, present: pd.Series) -> Signs:
    if base.distinct <= 50:
        counts = present.astype(str).str.strip().value_counts()
        base = replace(base, levels=tuple(str(word) for word in counts.index))
    for code, fits in _codes():
        if float(words.map(fits).mean()) >= NEARLY_ALL:
            return replace(base, code=code)
    if float(words.map(lambda word: bool(COMMA_NUMBER.fullmatch(word))).mean()) >= NEARLY_ALL:
        return replace(base, trouble=COMMA)
    if float(words.map(lambda word: bool(DRESSED.fullmatch(word))).mean()) >= NEARLY_ALL:
        return replace(base, trouble="numbers with signs or words around them")
    return base


@lru_cache(maxsize=1)
def _codes() -> Sequence[tuple[str, Callable[[str], bool]]]:
    """Codes that the cells prove: check digits, exchanges, currencies, time zones."""
    exchanges, zones = known_exchanges(), available_timezones()
    return (
        *CHECKS.items(),
        ("exchange", lambda word: word.upper() in exchanges),
        ("currency", lambda word: word in CURRENCIES),
        ("zone", lambda word: word in zones and "/" in word),
    )


def dated(raw: pd.Series, dating: Dating) -> pd.Series:
    """The dates of a column as the readers will read them under ``dating``."""
    return read_dates(raw, dating.declared)[0]
