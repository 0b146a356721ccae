"""What a file of prices, levels or factors holds, and whether its numbers look like that."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from pipeline.core.findings import Finding, Severity
from pipeline.core.prices import Floats
from pipeline.inputs.contracts import row_numbers
from pipeline.inputs.files import ROW, Source

# Standard deviations of daily returns between which no market lies outside: common practice, no
# source.
LARGEST, SMALLEST = 0.2, 3e-4
DOUBLED_SHARE = 0.01
FEWEST = 2


@dataclass(frozen=True, slots=True)
class Quoted:
    """What a study declares of one file.

    Attributes:
        returns: whether it holds returns in place of closes.
        log: whether those are logarithmic.
        unit: ``decimal`` or ``percent``; '' if the study does not say, which reads as decimal.
        currency: whether its column ``currency`` is used.
    """

    returns: bool = False
    log: bool = False
    unit: str = ""
    currency: bool = False

    @property
    def value(self) -> str:
        """The column that holds the closes or returns."""
        return "return" if self.returns else "close"


@dataclass(frozen=True, slots=True)
class QuotedFiles:
    """What a study declares of its files of prices, benchmarks and factors.

    ``nonpositive_share`` is the share of a security's closes that may be zero or below.
    """

    prices: Quoted = field(default_factory=Quoted)
    benchmarks: Quoted = field(default_factory=Quoted)
    factors: Quoted = field(default_factory=lambda: Quoted(returns=True))
    nonpositive_share: float = 0.01


def as_simple(values: Floats, quoted: Quoted) -> Floats:
    """Returns as given -> simple decimal returns: R = exp(r) - 1 for logarithmic ones."""
    decimal = values / 100 if quoted.unit == "percent" else values
    return np.asarray(np.expm1(decimal) if quoted.log else decimal)


def return_findings(
    table: pd.DataFrame, source: Source, columns: Iterable[str], quoted: Quoted
) -> Iterator[Finding]:
    """What the size of each column of returns says against the unit and kind declared.

    A declared unit makes a doubt about it a warning.
    """
    for name in columns:
        values = table[name].to_numpy(np.float64)
        yield from _impossible(table, source, name, values, quoted)
        scaled = values / 100 if quoted.unit == "percent" else values
        known = scaled[np.isfinite(scaled)]
        if len(known) < FEWEST:
            continue
        spread = float(known.std())
        doubled = float((np.abs(known) > 1).mean())
        if spread > LARGEST or doubled > DOUBLED_SHARE:
            remedy = "Set unit = 'percent' for the file if that is what it holds."
            yield _unit(source, name, spread, remedy, quoted)
        elif 0 < spread < SMALLEST:
            remedy = "Set unit = 'decimal' for the file if it holds no percentages."
            yield _unit(source, name, spread, remedy, quoted)


def _unit(source: Source, name: str, spread: float, remedy: str, quoted: Quoted) -> Finding:
    return Finding(
        "return_unit",
        Severity.WARNING if quoted.unit else Severity.ERROR,
        source.file,
        got=f"a daily standard deviation of {spread:.2g} as decimals",
        expected="daily returns as decimals, 0.01 for one percent, or a declared unit",
        remedy=f"{remedy} Declare series.{source.table}.unit to go on as it is.",
        column=source.columns.get(name, name),
    )


def _impossible(
    table: pd.DataFrame, source: Source, name: str, values: Floats, quoted: Quoted
) -> Iterator[Finding]:
    lowest = -100.0 if quoted.unit == "percent" else -1.0
    bad = values < lowest
    # In a file of mistaken unit most days are beyond it; that is said once, as return_unit.
    if quoted.log or not bad.any() or bad.mean() > DOUBLED_SHARE:
        return
    yield Finding(
        "impossible_return",
        Severity.ERROR,
        source.file,
        got=f"{int(bad.sum())} returns below -100%, first {values[bad][0]:g}",
        expected="simple returns, of which none loses more than everything",
        remedy=f"Correct the cells, or set series.{source.table}.returns = 'log'.",
        rows=row_numbers(table.loc[bad, ROW]),
        column=source.columns.get(name, name),
    )
