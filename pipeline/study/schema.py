"""Every key a study file may hold, with its kind, default and reason.

The models are strict and frozen: an unknown key or a value of another kind is an error.
"""

from __future__ import annotations

from datetime import date, time
from pathlib import Path
from typing import Annotated, Literal

from pydantic import AfterValidator, BaseModel, ConfigDict, Field, field_validator, model_validator

from pipeline.core.design import COVARIANCES, LEARNERS
from pipeline.core.window import Window
from pipeline.registry import (
    ESTIMATORS,
    EXPECTED_RETURNS,
    FORMATS,
    PRICE_MEASURES,
    TABLE,
    TESTS,
    keys,
)

BY_RULE = "by_rule"


class Part(BaseModel):
    """A table of the study file: strict, frozen, no unknown key."""

    model_config = ConfigDict(extra="forbid", frozen=True, strict=True, populate_by_name=True)


def _known(table: str, *also: str) -> AfterValidator:
    names = (*also, *keys(table))

    def check(value: str) -> str:
        if value not in names:
            raise ValueError(f"must be one of {', '.join(names)}")
        return value

    check.names = names  # type: ignore[attr-defined]
    return AfterValidator(check)


Model = Annotated[str, _known(EXPECTED_RETURNS)]
Test = Annotated[str, _known(TESTS)]
LeadingTest = Annotated[str, _known(TESTS, BY_RULE)]
Estimator = Annotated[str, _known(ESTIMATORS)]
Format = Annotated[str, _known(FORMATS)]
Measure = Annotated[str, _known(PRICE_MEASURES)]
Span = Annotated[list[int], Field(min_length=2, max_length=2)]
Rationale = Annotated[str, Field(min_length=20)]


TableName = Literal["deals", "prices", "benchmarks", "candidates", "factors"]


class Inputs(Part):
    """Where the tables are. Paths count from the folder of the study file that names them."""

    deals: Path = Field(description="One row a deal.")
    prices: Path = Field(description="Daily closes: security, date, close, volume.")
    benchmarks: Path = Field(description="Index levels: exchange, date, close.")
    candidates: Path | None = Field(
        None, description="Companies by year that could have announced, for the selection model."
    )
    factors: Path | None = Field(
        None, description="Daily factor returns, decimal: exchange, date, one column a factor."
    )
    columns: dict[TableName, dict[str, str]] = Field(
        default_factory=dict,
        description="Your column names: [inputs.columns.deals] announced_at = 'Announced'.",
    )
    sheets: dict[TableName, str] = Field(
        default_factory=dict, description="Sheet of an xlsx file, by table; the first if absent."
    )
    timestamp_zone: str = Field(
        "", description="Time zone of announcements without one, e.g. Europe/London."
    )
    date_format: str = Field(
        "", description="Format of dates that are not YYYY-MM-DD, e.g. '%d/%m/%Y %H:%M'."
    )


class EventTime(Part):
    """Sessions are those of the security's own exchange, counted from day zero."""

    estimation: Span = Field([-250, -31], description="Estimation window, sessions, inclusive.")
    minimum_observations: int = Field(
        120, ge=30, description="Returns that the estimation window must hold."
    )
    headline: Span = Field([-1, 1], description="The window declared before looking.")
    windows: list[Span] = Field(
        default_factory=list, description="Secondary windows, adjusted for multiplicity."
    )
    cutoff_minutes: int = Field(
        0, ge=0, le=120, description="News this close to the close counts for the next session."
    )
    share_of_days: float = Field(
        0.8, gt=0, le=1, description="Share of a secondary window's days that must have traded."
    )
    mask_sessions: int = Field(
        5, ge=0, description="Sessions around another deal that are left out of estimation."
    )
    confounding_days: int = Field(
        1, ge=0, description="Sessions within which an earnings release is flagged."
    )

    real_jumps: list[str] = Field(
        default_factory=list,
        description="Deals whose price moved by a whole factor for real, not by a split.",
    )

    @model_validator(mode="after")
    def _ordered(self) -> EventTime:
        for start, end in (self.estimation, self.headline, *self.windows):
            if end < start:
                raise ValueError(
                    f"a last session after the first: [{start}, {end}] ends before it starts"
                )
        return self

    @property
    def estimation_window(self) -> Window:
        """The estimation window."""
        return Window(*self.estimation)

    @property
    def headline_window(self) -> Window:
        """The window declared before looking."""
        return Window(*self.headline)

    @property
    def all_windows(self) -> tuple[Window, ...]:
        """The headline window, then each secondary one once."""
        listed = [Window(*pair) for pair in (self.headline, *self.windows)]
        return tuple(dict.fromkeys(listed))


class Calendar(Part):
    """What you know better than the calendar of an exchange."""

    closed: list[date] = Field(
        default_factory=list, description="Dates on which it did not trade: [2023-09-01]."
    )
    closes: dict[str, time] = Field(
        default_factory=dict,
        description="Local closing times: { 2024-12-24 = 12:30:00 }; adds the session if need be.",
    )

    @field_validator("closes")
    @classmethod
    def _dates(cls, value: dict[str, time]) -> dict[str, time]:
        for day in value:
            date.fromisoformat(day)
        return value


class ExpectedReturns(Part):
    """How a normal return is made."""

    headline: Model = Field("market_model", description="The model of the headline numbers.")
    also: list[Model] = Field(
        default_factory=list, description="Models shown beside it for comparison."
    )

    @property
    def all_models(self) -> tuple[str, ...]:
        """The headline model, then each further one once."""
        return tuple(dict.fromkeys([self.headline, *self.also]))


class Tests(Part):
    """Tests of the mean abnormal return."""

    headline: LeadingTest = Field(
        BY_RULE,
        description="The test that leads; declared before looking. By rule: the sample-quantile "
        "test for up to five deals, else the dependence-adjusted one.",
    )
    use: list[Test] = Field(
        default_factory=lambda: list(keys(TESTS)), description="Tests shown, in this order."
    )


class Placebo(Part):
    """Pseudo-events on dates without an announcement: what the tests do when nothing happened."""

    draws: int = Field(0, ge=0, le=100_000, description="Samples drawn; 0 leaves the check out.")
    distance: int = Field(
        60, ge=10, le=200, description="Sessions a pseudo-event keeps from the company's deals."
    )


class Indicator(Part):
    """One where the column meets the condition, zero elsewhere."""

    column: str
    equals: str | int | float | None = None
    above: float | None = None

    @model_validator(mode="after")
    def _one_condition(self) -> Indicator:
        if (self.equals is None) == (self.above is None):
            raise ValueError("needs either equals or above")
        return self


class Characteristic(Part):
    """A variable made from one source and then treated by steps, always in the order shown."""

    label: str = Field("", description="How the variable is called on a page.")
    column: str | None = Field(None, description="Source: a column of the deals.")
    ratio: Annotated[list[str], Field(min_length=2, max_length=2)] | None = Field(
        None, description="Source: the first column divided by the second."
    )
    interaction: Annotated[list[str], Field(min_length=2, max_length=2)] | None = Field(
        None, description="Source: the product of two columns or characteristics."
    )
    indicator: Indicator | None = Field(None, description="Source: a condition on a column.")
    price: Measure | None = Field(None, description="Source: a measure made from prices.")
    window: Span | None = Field(
        None, description="Sessions the price measure looks at; must end before the windows."
    )
    lag: int = Field(0, ge=0, le=5, description="Take the candidate's value this many years back.")
    log: bool = Field(False, description="Natural logarithm.")
    winsorise: float = Field(
        0.0, ge=0, lt=0.5, description="Share set to the quantile at each end, on the rows used."
    )
    standardise: bool = Field(
        False, description="Subtract the mean and divide by the standard deviation."
    )

    @model_validator(mode="after")
    def _one_source(self) -> Characteristic:
        given = [name for name in SOURCES if getattr(self, name) is not None]
        if len(given) != 1:
            raise ValueError(f"needs exactly one source of {', '.join(SOURCES)}; has {given}")
        if (self.window is not None) and self.price is None:
            raise ValueError("window belongs to a price measure")
        if self.window is not None and self.window[1] < self.window[0]:
            raise ValueError(f"window {self.window} ends before it starts")
        if self.lag and self.column is None:
            raise ValueError("lag needs a column of the candidates")
        return self


SOURCES = ("column", "ratio", "interaction", "indicator", "price")


class Regression(Part):
    """The cross-section of abnormal returns in the headline window."""

    treatment: str = Field(description="The deal feature the committee can choose: 0 or 1.")
    continuous: bool = Field(
        False, description="Whether the treatment may have other values than 0 and 1."
    )
    controls: list[str] = Field(default_factory=list, description="Held fixed in every column.")
    fixed_effects: list[str] = Field(default_factory=list, description="Absorbed effects.")
    clusters: Annotated[list[str], Field(max_length=2)] = Field(
        default_factory=list, description="One or two dimensions of dependent errors."
    )
    columns: list[Estimator] = Field(
        default_factory=list,
        description="Estimators of the comparison table; all that the study allows if empty.",
    )


class Fit(Part):
    """How estimators are fitted, where they leave a choice."""

    covariance: Literal["auto", *COVARIANCES] = Field(  # type: ignore[valid-type]
        "auto", description="Errors; auto is each column's own rule, printed with it."
    )
    cluster_all: bool = Field(
        False, description="Cluster every column that can, not only those that do by rule."
    )
    learner: Literal[LEARNERS] = Field(  # type: ignore[valid-type]
        "penalised", description="How cross-fitted columns learn outcome and choice."
    )
    folds: int = Field(5, ge=1, le=20, description="Parts of the sample for cross-fitting.")
    matches: int = Field(1, ge=1, le=50, description="Nearest deals a deal is compared with.")
    curvature_only: bool = Field(
        False, description="Accept a selection model without an excluded variable."
    )


class Selection(Part):
    """Which companies announce at all."""

    explained_by: Annotated[list[str], Field(min_length=1)] = Field(
        description="Company variables, known for every candidate."
    )
    excluded: Annotated[list[str], Field(min_length=1)] = Field(
        description="Variables that move the decision to bid and nothing else."
    )
    rationale: Rationale = Field(description="The argument for the exclusion, printed verbatim.")


class Instruments(Part):
    """What moves the treatment and nothing else."""

    treatment: str = Field(alias="for", description="The variable they move.")
    use: Annotated[list[str], Field(min_length=1)] = Field(description="The instruments.")
    rationale: Rationale = Field(description="The argument for the exclusion, printed verbatim.")


Sign = Literal["+", "-", "0", "?"]


class SuspectedFactor(Part):
    """A factor nobody recorded, as you would argue it before a committee."""

    factor: str = Field(description="What it is.")
    on_outcome: Sign = Field(description="Sign of its effect on the return, all else equal.")
    on_treatment: Sign = Field(description="Sign of its effect on the choice of the feature.")
    evidence: str = Field("", description="Why you think so; printed verbatim.")


class SpecificationGrid(Part):
    """The specification curve: windows, models, controls, winsorising and samples, all combined."""

    run: bool = Field(False, description="Whether to make it.")
    control_sets: list[list[str]] = Field(
        default_factory=list, description="Sets of controls beside all of them and none."
    )
    winsorise: list[float] = Field(
        [0.0, 0.01], description="Shares of the outcome set to its quantile at either end."
    )
    permutations: int = Field(
        199, ge=0, le=100_000, description="Draws of the test of the whole curve; 0 leaves it out."
    )


class Scrutiny(Part):
    """What it would take to overturn the finding."""

    run: bool = Field(True, description="Whether to go through the doubts.")
    suspects: list[SuspectedFactor] = Field(
        default_factory=list,
        description="Factors nobody recorded: { factor, on_outcome, on_treatment, evidence }.",
    )
    reliability: dict[str, float] = Field(
        default_factory=dict,
        description="Variable -> share of its variance that is not error of record, in (0, 1].",
    )
    benchmarks: list[str] = Field(
        default_factory=list,
        description="Controls a hidden factor is likened to; the strongest one if empty.",
    )
    grid: SpecificationGrid = Field(default_factory=SpecificationGrid)
    simulate_errors: bool = Field(
        False, description="Whether errors of record are simulated as well (slow)."
    )


class Report(Part):
    """How the documents look."""

    groups: Annotated[list[str], Field(min_length=2, max_length=2)] = Field(
        default_factory=lambda: ["without", "with"],
        description="The two values of the treatment in words: untreated, treated.",
    )
    formats: list[Format] = Field(
        default_factory=lambda: list(keys(FORMATS)), description="What is written."
    )
    currency: str = Field("", description="Of the money columns, with scale: USD million.")


class Study(Part):
    """A study file, resolved: base files merged, paths absolute, defaults filled in."""

    name: str = Field(
        pattern=r"^[A-Za-z0-9][A-Za-z0-9_.-]*$",
        description="Name of the folder under reports/; the file's own name.",
    )
    title: str = Field(description="Title of the documents.")
    question: str = Field(description="What the committee wants to know.")
    seed: int = Field(20260301, ge=0, description="Seed of every random stream.")
    level: float = Field(0.95, gt=0.5, lt=1, description="Confidence level of intervals.")
    inputs: Inputs
    event_time: EventTime = Field(default_factory=EventTime)
    calendars: dict[str, Calendar] = Field(
        default_factory=dict, description="Changes of exchange calendars, by ISO 10383 code."
    )
    expected_returns: ExpectedReturns = Field(default_factory=ExpectedReturns)
    tests: Tests = Field(default_factory=Tests)
    placebo: Placebo = Field(default_factory=Placebo)
    characteristics: dict[str, Characteristic] = Field(default_factory=dict)
    regression: Regression | None = None
    selection: Selection | None = None
    instruments: Instruments | None = None
    fit: Fit = Field(default_factory=Fit)
    scrutiny: Scrutiny = Field(default_factory=Scrutiny)
    labels: dict[str, str] = Field(
        default_factory=dict, description="Words for variables: paid_in_shares = 'Paid in shares'."
    )
    report: Report = Field(default_factory=Report)

    @property
    def columns(self) -> tuple[str, ...]:
        """Estimator keys of the comparison table: those named, or all that the study allows."""
        if self.regression is None:
            return ()
        if self.regression.columns:
            return tuple(dict.fromkeys(self.regression.columns))
        has = {
            "effects": bool(self.regression.fixed_effects),
            "selection": self.selection is not None,
            "instruments": self.instruments is not None,
        }
        return tuple(
            entry.key
            for entry in TABLE[ESTIMATORS]
            if entry.default and all(has[need] for need in entry.needs)
        )
