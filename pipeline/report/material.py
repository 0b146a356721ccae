"""What the sections draw on: the results, and the one way to quote a number from a frame."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd

from pipeline.core.estimate import Estimate, NotApplicable, TestResult, Withheld
from pipeline.core.house import House, money_heading
from pipeline.core.outcome import BASIS_POINTS, Unit
from pipeline.core.prices import Booleans
from pipeline.core.results import Results, StudyFacts, WindowTests
from pipeline.report.document import Key, Paragraph, Piece, Quote, Verbatim
from pipeline.report.headline import effect_name, headline_frame
from pipeline.report.numerals import LEAST_P, PERCENT, show, true_minus, unit_digits

# Rows of a table of deals in a document; a sheet holds a million, a reader far fewer.
MOST_ROWS = 10_000


def rows_left_out(total: int, table: str) -> tuple[Paragraph, ...]:
    """The note of a table that stops after ``MOST_ROWS`` rows, if it does."""
    if total <= MOST_ROWS:
        return ()
    return (prose(f"The first {MOST_ROWS:,} of {total:,} rows. All are in data/{table}.parquet."),)


def prose(*pieces: Piece | tuple[Piece, ...], lead: str = "") -> Paragraph:
    """A paragraph of pieces and runs of pieces; empty words are left out."""
    flat: list[Piece] = []
    for piece in pieces:
        flat.extend(piece if isinstance(piece, tuple) else (piece,))
    return Paragraph(tuple(piece for piece in flat if piece != ""), lead)


def taken(text: str, origin: str) -> Verbatim:
    """Words of the run, taken over with a true minus sign before numbers."""
    return Verbatim(true_minus(text.strip()), origin)


def embedded(text: str, origin: str) -> Verbatim:
    """Words of the run that stand inside a sentence: without their own full stop."""
    return taken(text.strip().rstrip("."), origin)


def quote(
    frames: Mapping[str, pd.DataFrame],
    table: str,
    column: str,
    where: Mapping[str, Key],
    *,
    digits: int = 0,
    scale: float = 1.0,
    least: float = 0.0,
    signed: bool = False,
) -> Quote:
    """The number that stands in ``table`` at ``column``, in the row that ``where`` picks.

    Several rows may be picked if they agree on the number (the mean of a window stands beside
    each of its tests).

    Raises:
        KeyError: if the table, a column or the row is not there.
        ValueError: if the rows picked disagree.
    """
    rows = matching(frames[table], where)
    values = frames[table][column].to_numpy()[rows]
    different = set(values.tolist())
    if not different:
        raise KeyError(f"{table} has no row with {dict(where)}")
    if len(different) > 1 and not np.isnan(values).all():
        raise ValueError(f"{table} has {len(different)} values of {column} with {dict(where)}")
    value = float(values[0])
    text = show(value * scale, digits, least=least, signed=signed)
    return Quote(text, value, table, column, tuple(where.items()), scale, digits)


def named(words: str) -> str:
    """A label as it stands inside a sentence, set off by quotation marks."""
    return f"“{words}”"


def capital(text: str) -> str:
    """``text`` with its first letter a capital."""
    return text[:1].upper() + text[1:]


def matching(frame: pd.DataFrame, where: Mapping[str, Key]) -> Booleans:
    """(rows,) whether a row of ``frame`` holds each of the values in ``where``."""
    found = np.ones(len(frame), dtype=np.bool_)
    for name, value in where.items():
        found &= np.asarray(frame[name].to_numpy(dtype=object) == value, dtype=np.bool_)
    return found


@dataclass(frozen=True, slots=True, eq=False)
class Material:
    """The results of a run with the frames its prose may quote."""

    results: Results
    frames: Mapping[str, pd.DataFrame]

    @classmethod
    def of(cls, results: Results) -> Material:
        """The material of a run; the headline frame is made here if the run does not hold it."""
        frames = dict(results.tables)
        frames.setdefault("headline", headline_frame(results))
        return cls(results, frames)

    @property
    def study(self) -> StudyFacts:
        """The facts of the study file."""
        return self.results.study

    @property
    def tests(self) -> WindowTests:
        """The tests of the headline window under the headline model."""
        return self.results.headline

    @property
    def unit(self) -> Unit:
        """How amounts of the outcome are printed."""
        return self.study.outcome.unit

    @property
    def house(self) -> House:
        """The style of the papers."""
        return self.study.house

    @property
    def money_unit(self) -> str:
        """The unit of a column of money, as the house shows it."""
        return money_heading(self.study.currency, self.house.money)

    @property
    def ready(self) -> bool:
        """Whether the deal list held the outcome, so that there is no reaction to speak of."""
        return self.study.outcome.ready

    @property
    def outcome(self) -> str:
        """What is explained, in words: ``reaction`` where returns were measured."""
        return self.study.outcome.words if self.ready else "reaction"

    @property
    def mean(self) -> tuple[float, float, float]:
        """The mean outcome of all deals and the ends of its interval, as stored."""
        if not self.ready:
            return (self.tests.mean, *self.tests.interval)
        mean, low, high = (self.summary(name).value for name in ("mean", "ci_low", "ci_high"))
        return mean, low, high

    @property
    def spread(self) -> float:
        """The standard deviation of the outcome over all deals, as stored."""
        return self.summary("std_dev").value if self.ready else self.tests.std_dev

    @property
    def deals(self) -> int:
        """Deals behind the mean outcome."""
        return int(self.summary("n").value) if self.ready else self.tests.n

    @property
    def estimates(self) -> tuple[Estimate, ...]:
        """The columns that hold numbers, in order."""
        return tuple(c for c in self.results.columns if isinstance(c, Estimate))

    @property
    def withheld(self) -> tuple[Withheld, ...]:
        """The columns that hold none."""
        return tuple(c for c in self.results.columns if isinstance(c, Withheld))

    @property
    def lead(self) -> Estimate | None:
        """The column that answers the question, if it holds a number."""
        at = self.results.lead
        column = self.results.columns[at] if 0 <= at < len(self.results.columns) else None
        return column if isinstance(column, Estimate) else None

    @property
    def headline_names(self) -> frozenset[str]:
        """The names of the numbers in the headline frame."""
        return frozenset(self.frames["headline"]["name"].astype(str))

    @property
    def feature(self) -> str:
        """The deal feature asked about, in words; empty if the study asks about the mean."""
        return self.study.words(self.study.treatment) if self.study.treatment else ""

    def in_words(self, text: str) -> str:
        """A sentence of the run with the names of variables replaced by their words."""
        study = self.study
        known = {study.treatment, *study.regressors, *study.instruments, *study.selection,
                 *study.excluded, *study.effects, *study.clusters}  # fmt: skip
        for name in sorted((n for n in known if "_" in n), key=len, reverse=True):
            text = named(study.words(name)).join(re.split(rf"\b{re.escape(name)}\b", text))
        for name in study.clusters:
            text = re.sub(rf"\b(by|and) {re.escape(name)}\b", rf"\1 {study.words(name)}", text)
        return true_minus(text)

    def known(self, name: str) -> bool:
        """Whether the headline frame holds a finite number called ``name``."""
        frame = self.frames["headline"]
        return bool(frame.loc[frame["name"] == name, "value"].notna().any())

    def number(self, name: str, column: str = "value", *, scale: float = 1, digits: int = 0,
               signed: bool = False) -> Quote:  # fmt: skip
        """A number of the headline frame."""
        where = {"name": name}
        return quote(
            self.frames, "headline", column, where, scale=scale, digits=digits, signed=signed
        )

    def effect(self, name: str, digits: int) -> tuple[Piece, ...]:
        """A difference of the headline frame in the outcome's unit."""
        unit = self.unit
        return (unit.before, self.number(name, scale=unit.scale, digits=digits), unit.change)

    def span(self, names: tuple[str, str], digits: int, joint: str = " to ") -> tuple[Piece, ...]:
        """Two differences of the headline frame, the unit behind the second."""
        unit = self.unit
        low, high = (self.number(name, scale=unit.scale, digits=digits) for name in names)
        return (unit.before, low, joint, unit.before, high, unit.change)

    def summary(self, column: str, *, scale: float = 1, digits: int = 0) -> Quote:
        """A number about all deals of an outcome that the deal list held."""
        where = {"group": str(self.frames["summary"]["group"].iloc[0])}
        return quote(self.frames, "summary", column, where, scale=scale, digits=digits)

    def percent(self, name: str, column: str = "value") -> tuple[Piece, ...]:
        """A fraction of the headline frame in percent, no more decimals than it needs."""
        value = self.number(name, column).value * PERCENT
        digits = 0 if abs(value - round(value)) < 1e-9 else 1
        return (self.number(name, column, scale=PERCENT, digits=digits), "%")

    def event(self, column: str, *, scale: float = 1, digits: int = 0, least: float = 0,
              signed: bool = False) -> Quote:  # fmt: skip
        """A number of the headline window in ``event_tests``, from the leading test's row.

        From any of the window's rows if the leading test was not made.
        """
        window = self.tests.window
        where: dict[str, Key] = {
            "window_start": window.start,
            "window_end": window.end,
            "expected_return": self.tests.model,
        }
        if self.study.headline_test in self.tests.tests:
            where["test"] = self.study.headline_test
        where = self._sampled("event_tests", where)
        return quote(self.frames, "event_tests", column, where, digits=digits, scale=scale,
                     least=least, signed=signed)  # fmt: skip

    def window(self) -> tuple[Piece, ...]:
        """The headline window, as in [−1, +1]."""
        start, end = (self.event(f"window_{side}", signed=True) for side in ("start", "end"))
        return ("[", start, ", ", end, "]")

    def coefficient(self, estimate: Estimate) -> Quote:
        """The treatment coefficient of a column, in the outcome's unit, from ``estimates``."""
        where: dict[str, Key] = {
            **self.study.explained,
            "estimator": estimate.estimator,
            "title": estimate.title,
            "stage": "",
            "term": estimate.treatment,
        }
        where = self._sampled("estimates", where)
        digits = effect_digits(estimate, self.unit)
        return quote(
            self.frames, "estimates", "coefficient", where, digits=digits, scale=self.unit.scale
        )

    def effect_name(self, estimate: Estimate) -> str:
        """The name of a column's effect in the headline frame."""
        at = next(i for i, column in enumerate(self.results.columns) if column is estimate)
        return effect_name(at, estimate)

    def p_value(self) -> Quote:
        """The p-value of the leading test in the headline window."""
        return self.event("p_value", digits=3, least=LEAST_P)

    def _sampled(self, table: str, where: dict[str, Key]) -> dict[str, Key]:
        """``where`` with the sample of the first row it picks: the study's own comes first."""
        frame = self.frames[table]
        if "sample" not in frame:
            return where
        samples = frame["sample"].to_numpy()[matching(frame, where)]
        return {**where, "sample": str(samples[0])} if len(samples) else where


def effect_digits(estimate: Estimate, unit: Unit = BASIS_POINTS) -> int:
    """Decimals of a column's effect in the outcome's unit."""
    return unit_digits(float(estimate.term(estimate.treatment)["std_error"]), unit)


def headline_result(material: Material) -> TestResult | NotApplicable | None:
    """The result of the test that leads; None if the run did not make it."""
    return material.tests.tests.get(material.study.headline_test)
