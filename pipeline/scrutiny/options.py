"""What a person may ask of the scrutiny, and what one part of it answers."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

from pipeline.core.design import FitOptions
from pipeline.core.estimate import Diagnostic
from pipeline.core.scrutiny import Variant
from pipeline.scrutiny.anticipation import Expected
from pipeline.scrutiny.directions import Suspect

HOUSE = "common practice, no source"


@dataclass(frozen=True, slots=True)
class ScrutinyOptions:
    """The doubts to go through.

    Attributes:
        fit: how refits treat errors; its level is that of every interval.
        suspects: factors nobody recorded, with signs.
        reliability: regressor -> true over recorded variance.
        benchmarks: controls a hidden confounder is likened to; the strongest one if empty.
        multiples: how many times as strong.
        violations: shares of the reduced form that the instruments may reach by another way.
        misclassified: (missed, false) rates of a 0/1 treatment.
        misplaced: shares of announcements on days outside the window.
        expected: what investors may have thought beforehand.
        correlations: of the errors of choice and outcome.
        resamples: draws of the bootstrap.
        simex: whether to simulate measurement error as well.
        seed: of every random stream.
        labels: variable -> its words.
        groups: dimension -> words of its codes; deals stand for them where there are none.
    """

    fit: FitOptions = field(default_factory=FitOptions)
    suspects: Sequence[Suspect] = ()
    reliability: Mapping[str, float] = field(default_factory=dict)
    benchmarks: tuple[str, ...] = ()
    multiples: tuple[float, ...] = (1.0, 2.0, 3.0)
    violations: tuple[float, ...] = (0.1, 0.25, 0.5)
    misclassified: tuple[tuple[float, float], ...] = ((0.02, 0.02), (0.05, 0.05))
    misplaced: tuple[float, ...] = (0.05, 0.1, 0.2)
    expected: tuple[Expected, ...] = (
        Expected(0.2, 0.2),
        Expected(0.4, 0.2),
        Expected(0.2, 0.4),
        Expected(0.0, 0.0, 0.9),
    )
    correlations: tuple[float, ...] = (-0.3, -0.1, 0.1, 0.3)
    resamples: int = 499
    simex: bool = False
    seed: int = 0
    labels: Mapping[str, str] = field(default_factory=dict)
    groups: Mapping[str, Sequence[str]] = field(default_factory=dict)

    @property
    def level(self) -> float:
        """Of every interval."""
        return self.fit.level

    def words(self, name: str) -> str:
        """A variable's label, or its name with spaces."""
        return self.labels.get(name, name.replace("_", " "))


@dataclass(frozen=True, slots=True)
class Target:
    """The number under scrutiny: what it is in words, and the title of its column."""

    words: str
    title: str
    level: float
    n: int

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


@dataclass(frozen=True, slots=True)
class Part:
    """What one part of the scrutiny found."""

    variants: tuple[Variant, ...] = ()
    checks: tuple[Diagnostic, ...] = ()
    facts: Mapping[str, float] = field(default_factory=dict)
    notes: tuple[str, ...] = ()
