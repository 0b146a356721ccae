"""What a study explains: how it is called, how it is stored and in which unit it is printed."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Final

from pipeline.core.estimate import t_reach
from pipeline.core.house import money_heading, money_words
from pipeline.core.prices import Floats


@dataclass(frozen=True, slots=True)
class Unit:
    """How the numbers of an outcome are given, stored and printed.

    A cell that holds g is stored as (g - ``zero``) / ``given``; a stored value v is printed as v
    times ``scale``.

    Attributes:
        key: the name in a study file.
        given, zero: as above.
        scale: as above.
        before: printed before an amount, a space included.
        level, change: printed after an amount and after a difference, a space included.
        short: in headings of tables and on axes.
        words: of a difference, in a sentence that explains a table.
        slug: in names of columns of data.
        decimals: most decimals of a number whose error is not smaller than they show.
        relative: whether the outcome is a share of something, so that 1 stands for all of it.
    """

    key: str
    given: float
    scale: float
    level: str
    change: str
    short: str
    words: str
    slug: str
    decimals: int
    zero: float = 0.0
    before: str = ""
    relative: bool = True

    @property
    def heading(self) -> str:
        """The unit of an amount in a heading: of a level, where ``short`` is of a difference."""
        return "%" if self.level == "%" else self.short

    @property
    def amounts(self) -> str:
        """The unit of an amount in a sentence."""
        return "percent" if self.level == "%" else self.words

    def stored(self, given: Floats) -> Floats:
        """(n,) cells of a file as they are stored."""
        return (given - self.zero) / self.given

    def stored_error(self, given: Floats) -> Floats:
        """(n,) standard errors of a file as they are stored."""
        return given / self.given


BASIS_POINTS: Final = Unit(
    "basis points", 1e4, 1e4, " bp", " bp", "bp", "basis points (bp)", "bp", 1
)
PERCENT: Final = Unit(
    "percent", 100, 100, "%", " percentage points", "pp", "percentage points (pp)", "pp", 2
)
MONEY: Final = Unit("money", 1, 1, "", "", "", "money", "money", 2, relative=False)
UNITS: Final[Mapping[str, Unit]] = {
    unit.key: unit
    for unit in (
        PERCENT,
        replace(PERCENT, key="decimal", given=1),
        replace(PERCENT, key="price ratio", given=1, zero=1),
        BASIS_POINTS,
        Unit(
            "log points", 100, 100, " log points", " log points", "log points",
            "log points, hundredths of a natural logarithm", "log_points", 2,
        ),
        MONEY,
        Unit("number", 1, 1, "", "", "", "units of the outcome", "number", 4, relative=False),
    )
}  # fmt: skip
UNIT_KEYS: Final = tuple(UNITS)


def money_in(currency: str, pattern: str = "") -> Unit:
    """Money in a currency with its scale, such as ``USD million``, shown by the house's pattern."""
    before, after = money_words(currency, pattern)
    short = money_heading(currency, pattern)
    return replace(MONEY, before=before, level=after, change=after, short=short, words=short)


@dataclass(frozen=True, slots=True)
class Outcome:
    """What the deals differ in, the abnormal return of the headline window unless told otherwise.

    Attributes:
        words: how it is called inside a sentence.
        unit: how it is printed.
        column: of the deal table, for an outcome that the deal list holds already; else ''.
        error: column of its known standard errors, '' if there is none.
        base: column of money that a relative outcome is a share of, '' if it is of none.
        date: column of dates that cluster the deals, '' without one.
        file: the deal list it was taken from.
    """

    words: str = "abnormal return"
    unit: Unit = BASIS_POINTS
    column: str = ""
    error: str = ""
    base: str = "market_value"
    date: str = ""
    file: str = ""

    @property
    def ready(self) -> bool:
        """Whether the deal list holds the outcome, so that no return was measured."""
        return bool(self.column)


ABNORMAL_RETURN: Final = Outcome()


def with_decimals(outcome: Outcome, decimals: int | None) -> Outcome:
    """The outcome with another limit to its decimals; as it is without one."""
    if decimals is None:
        return outcome
    return replace(outcome, unit=replace(outcome.unit, decimals=decimals))


@dataclass(frozen=True, slots=True)
class Standing:
    """One deal's outcome among the others.

    ``value``, ``low`` and ``high`` are as stored, the interval from its own known error (NaN
    without one); ``rank`` is 1 for the largest of ``deals``.
    """

    outcome: Outcome
    value: float
    low: float
    high: float
    rank: int
    deals: int


def standing_of(outcome: Outcome, value: float, error: float, all_values: Floats,
                level: float) -> Standing:  # fmt: skip
    """Where ``value``, with its standard ``error`` (NaN if unknown), lies among (n,) values."""
    half = t_reach(level, float("inf")) * error
    rank = 1 + int((all_values > value).sum())
    return Standing(outcome, value, value - half, value + half, rank, len(all_values))
