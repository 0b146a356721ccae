"""Keys about what might overturn the finding: each doubt with the values gone through."""

from __future__ import annotations

from collections.abc import Container
from typing import Annotated, Literal

from pydantic import Field, model_validator

from pipeline.study.part import Estimator, Part

SHORTEST_ARGUMENT = 20
Sign = Literal["+", "-", "0", "?"]
Share = Annotated[float, Field(ge=0, lt=1)]
Above = Annotated[float, Field(gt=0)]
Fraction = Annotated[float, Field(gt=0, le=1)]
Inside = Annotated[float, Field(gt=-1, lt=1)]
Pair = Annotated[list[Share], Field(min_length=2, max_length=2)]


class SuspectedFactor(Part):
    """A factor nobody recorded, as you would argue it before a committee."""

    factor: str = Field(description="What it is.")
    on_outcome: Sign = Field(description="Sign of its effect on the return, all else equal.")
    on_treatment: Sign = Field(description="Sign of its effect on the choice of the feature.")
    evidence: str = Field("", description="Why you think so; printed verbatim.")


class SampleFilter(Part):
    """Deals that meet a condition on a column of the deals, or those that do not."""

    column: str = Field(description="A column of the deals.")
    equals: str | int | float | None = Field(None, description="Keep deals with this value.")
    above: float | None = Field(None, description="Keep deals above this.")
    below: float | None = Field(None, description="Keep deals below this.")
    leave_out: bool = Field(False, description="Leave these deals out in place of keeping them.")

    @model_validator(mode="after")
    def _one_condition(self) -> SampleFilter:
        given = [name for name in ("equals", "above", "below") if getattr(self, name) is not None]
        if not given or ("equals" in given and len(given) > 1):
            raise ValueError("needs either equals, or above, below or both")
        return self


class SpecificationGrid(Part):
    """The specification curve: windows, models, controls, winsorising and samples, all combined."""

    run: bool = Field(False, description="Whether to make it.")
    estimators: list[Estimator] = Field(
        default_factory=list,
        description="Columns to go through, the headline's first; least squares with and without "
        "the fixed effects if empty. Others are fitted cell by cell.",
    )
    control_sets: list[list[str]] = Field(
        default_factory=list, description="Sets of controls beside all of them and none."
    )
    winsorise: list[float] = Field(
        [0.0, 0.01], description="Shares of the outcome set to its quantile at either end."
    )
    samples: dict[str, SampleFilter] = Field(
        default_factory=dict,
        description="Name in words -> condition on a column, beside all deals and those without a "
        "flag: { column, equals, above, below, leave_out }.",
    )
    permutations: int = Field(
        199, ge=0, le=100_000, description="Draws of the test of the whole curve; 0 leaves it out."
    )
    adjusted_by: int = Field(
        1999,
        ge=0,
        le=100_000,
        description="Draws of the step-down p-values of all cells; 0 leaves them out.",
    )
    most_cells: int = Field(2_000, ge=1, description="A grid of more cells is an error.")
    allow: bool = Field(False, description="Let the grid have more cells than that.")


class Scrutiny(Part):
    """What it would take to overturn the finding."""

    run: bool = Field(True, description="Whether to go through the doubts.")
    suspects: list[SuspectedFactor] = Field(
        default_factory=list,
        description="Factors nobody recorded: { factor, on_outcome, on_treatment, evidence }.",
    )
    benchmarks: list[str] = Field(
        default_factory=list,
        description="Controls a hidden factor is likened to; the strongest one if empty.",
    )
    multiples: list[Above] = Field(
        [1.0, 2.0, 3.0], description="How many times as strong as a benchmark it may be."
    )
    largest_r2: list[Fraction] = Field(
        [0.25, 0.5, 0.75, 1.0],
        description="R² with nothing left out, shown beside 1.3 times and twice the R² and the R² "
        "plus .25; values below the R² are passed over.",
    )
    resamples: int = Field(
        499, ge=50, le=100_000, description="Bootstrap draws for the interval under hidden factors."
    )
    correlations: list[Inside] = Field(
        [-0.3, -0.1, 0.1, 0.3], description="Of the errors of choice and return."
    )
    reliability: dict[str, float] = Field(
        default_factory=dict,
        description="Variable -> share of its variance that is not error of record, in (0, 1].",
    )
    simulate_errors: bool = Field(
        False, description="Whether errors of record are simulated as well (slow)."
    )
    misclassified: list[Pair] = Field(
        [[0.02, 0.02], [0.05, 0.05]],
        description="Shares of deals with the feature recorded without it, and the other way.",
    )
    misplaced: list[Share] = Field(
        [0.05, 0.1, 0.2], description="Shares of announcements on days outside the window."
    )
    known_before: Annotated[list[Share], Field(min_length=1)] = Field(
        [0.0, 0.1, 0.2, 0.4], description="Shares of the news known before the announcement."
    )
    completion: Annotated[list[Fraction], Field(min_length=1)] = Field(
        [1.0, 0.9, 0.8], description="Chances to close, each combined with each share known."
    )
    known_unequally: list[Pair] = Field(
        [[0.4, 0.2], [0.2, 0.4]],
        description="Shares known of deals with the feature and without it.",
    )
    violations: list[Above] = Field(
        [0.1, 0.25, 0.5],
        description="Shares of the reduced form the instruments may reach by another way.",
    )
    leave_out: list[str] = Field(
        default_factory=list,
        description="Further columns of the deals whose groups are left out in turn, beside deals, "
        "companies, announcement dates, clusters and fixed effects.",
    )
    reverse: list[str] = Field(
        default_factory=list,
        description="Controls that move the return and not the choice; with them choice and "
        "return are fitted as two equations as well. Needs [instruments].",
    )
    reverse_rationale: str = Field(
        "", description="The argument for that, printed verbatim; must be given with it."
    )
    grid: SpecificationGrid = Field(default_factory=SpecificationGrid)

    @property
    def argued(self) -> Scrutiny | None:
        """Itself, if it holds an argument to print."""
        return self if self.reverse else None

    @property
    def rationale(self) -> str:
        """The argument for the controls that move the return alone."""
        return self.reverse_rationale

    @model_validator(mode="after")
    def _argued(self) -> Scrutiny:
        if self.reverse and len(self.reverse_rationale) < SHORTEST_ARGUMENT:
            raise ValueError("reverse without reverse_rationale: say why they leave the choice")
        return self

    def columns(self, made: Container[str]) -> tuple[list[str], list[str]]:
        """Columns of the deals it reads beside the regression's: numbers, texts.

        ``made`` are characteristics, which need no column of their own.
        """
        numbers: list[str] = []
        texts = list(self.leave_out)
        for sample in self.grid.samples.values() if self.grid.run else ():
            (texts if isinstance(sample.equals, str) else numbers).append(sample.column)
        return [n for n in numbers if n not in made], [t for t in texts if t not in made]
