"""What a person may ask of the scrutiny, and what one part of it answers."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

from pipeline.core.design import FitOptions
from pipeline.core.estimate import ConfidenceSet, Diagnostic, Shape
from pipeline.core.prices import Integers
from pipeline.core.scrutiny import Variant
from pipeline.scrutiny.anticipation import Expected
from pipeline.scrutiny.directions import Suspect

HOUSE = "common practice, no source"
Row = Mapping[str, object]


@dataclass(frozen=True, slots=True)
class ScrutinyOptions:
    """The doubts to go through.

    Attributes:
        fit: how refits treat errors; its level is that of every interval.
        suspects: factors nobody recorded, with signs.
        reliability: regressor -> true over recorded variance.
        benchmarks: controls a hidden confounder is likened to; the strongest one if empty.
        multiples: how many times as strong.
        largest_r2: values of the largest R² to show beside those by rule, each in (0, 1].
        violations: shares of the reduced form that the instruments may reach by another way.
        misclassified: (missed, false) rates of a 0/1 treatment.
        misplaced: shares of announcements on days outside the window.
        expected: what investors may have thought beforehand of deals of either kind, unequally.
        known_before, completion: shares of the news known and chances to close, in all pairs.
        correlations: of the errors of choice and outcome.
        resamples: draws of the bootstrap.
        simex: whether to simulate measurement error as well.
        seed: of every random stream.
        outcome: what is explained, in words that follow "the".
        labels: variable -> its words.
        groups: dimension -> words of its codes; deals stand for them where there are none.
        dimensions: further ways to group the deals -> (n,) codes; each is left out in turn.
        reverse: controls that move the outcome and not the choice, for the equation of the choice.
    """

    fit: FitOptions = field(default_factory=FitOptions)
    suspects: Sequence[Suspect] = ()
    reliability: Mapping[str, float] = field(default_factory=dict)
    benchmarks: tuple[str, ...] = ()
    multiples: tuple[float, ...] = (1.0, 2.0, 3.0)
    largest_r2: tuple[float, ...] = (0.25, 0.5, 0.75, 1.0)
    violations: tuple[float, ...] = (0.1, 0.25, 0.5)
    misclassified: tuple[tuple[float, float], ...] = ((0.02, 0.02), (0.05, 0.05))
    misplaced: tuple[float, ...] = (0.05, 0.1, 0.2)
    expected: tuple[Expected, ...] = (Expected(0.4, 0.2), Expected(0.2, 0.4))
    known_before: tuple[float, ...] = (0.0, 0.1, 0.2, 0.4)
    completion: tuple[float, ...] = (1.0, 0.9, 0.8)
    correlations: tuple[float, ...] = (-0.3, -0.1, 0.1, 0.3)
    resamples: int = 499
    simex: bool = False
    seed: int = 0
    outcome: str = "return"
    labels: Mapping[str, str] = field(default_factory=dict)
    groups: Mapping[str, Sequence[str]] = field(default_factory=dict)
    dimensions: Mapping[str, Integers] = field(default_factory=dict)
    reverse: tuple[str, ...] = ()

    @property
    def level(self) -> float:
        """Of every interval."""
        return self.fit.level

    def words(self, name: str) -> str:
        """A variable's label, or its name with spaces."""
        return self.labels.get(name, name.replace("_", " "))


@dataclass(frozen=True, slots=True)
class Target:
    """The number under scrutiny in words, the title of its column, and what it is an effect on."""

    words: str
    title: str
    level: float
    n: int
    outcome: str = "return"

    def variant(
        self, dimension: str, words: str, values: Sequence[float], n: int | None = None
    ) -> Variant:
        """A row; ``values`` are estimate and the ends of its interval."""
        estimate, low, high = values
        return Variant(
            self.words, dimension, words, estimate, low, high, self.n if n is None else n
        )

    def check(
        self,
        words: str,
        value: float,
        threshold: str,
        passed: bool,
        meaning: str,
        source: str,
    ) -> Diagnostic:
        """A diagnostic of the column that passes or warns."""
        verdict = "pass" if passed else "warn"
        return Diagnostic(self.title, words, value, threshold, verdict, meaning, source)

    def breakdown(
        self,
        key: str,
        statement: str,
        assumption: str,
        needed: str,
        value: tuple[float, str],
        wanted: float,
        compared: str,
        source: str,
    ) -> Row:
        """A row of the table of breakdowns; ``value`` with its unit, the verdict by its size."""
        return {
            "key": key,
            "target": self.words,
            "statement": statement,
            "assumption": assumption,
            "needed": needed,
            "value": value[0],
            "unit": value[1],
            "wanted": wanted,
            "compared": compared,
            "verdict": "gives" if abs(value[0]) <= wanted else "holds",
            "source": source,
        }


@dataclass(frozen=True, slots=True)
class Part:
    """What one part of the scrutiny found; ``tables`` are rows of those in ``core.scrutiny``."""

    variants: tuple[Variant, ...] = ()
    checks: tuple[Diagnostic, ...] = ()
    facts: Mapping[str, float] = field(default_factory=dict)
    notes: tuple[str, ...] = ()
    tables: Mapping[str, Sequence[Row]] = field(default_factory=dict)


def ends(found: ConfidenceSet) -> tuple[float, float]:
    """Low and high end; infinite unless the set is an interval, NaN if it is empty."""
    if found.shape is Shape.INTERVAL:
        return found.low, found.high
    if found.shape is Shape.EMPTY:
        return float("nan"), float("nan")
    return float("-inf"), float("inf")
