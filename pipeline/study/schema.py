"""Every key a study file may hold, with its kind, default and reason.

The models are strict and frozen: an unknown key or a value of another kind is an error.
"""

from __future__ import annotations

from datetime import date, time
from pathlib import Path
from typing import Annotated, Literal

from pydantic import Field, field_validator, model_validator

from pipeline.registry import ESTIMATORS, FORMATS, TABLE, TESTS
from pipeline.study.benchmarks import BenchmarkChecks
from pipeline.study.bounds import Bounds
from pipeline.study.compute import Compute
from pipeline.study.deal_list import DealList
from pipeline.study.doubts import Scrutiny
from pipeline.study.horizons import CalendarTime, MatchedControl
from pipeline.study.outcome import Outcome
from pipeline.study.papers import Papers
from pipeline.study.part import (
    BY_RULE,
    ORDERED,
    Format,
    LeadingTest,
    Measure,
    Model,
    Part,
    Span,
    Test,
    misfit,
)
from pipeline.study.prices import Currency, Screens, Series
from pipeline.study.questions import Fit, Instruments, Regression, Selection
from pipeline.study.sources import SourceKeys
from pipeline.study.timing import EventTime

TableName = Literal[
    "deals", "prices", "benchmarks", "candidates", "factors", "peers", "listings", "news",
    "restricted", "rates", "delistings",
]  # fmt: skip


class Inputs(Part):
    """Where the tables are. Paths count from the folder of the study file that names them."""

    deals: Path = Field(
        description="One row a deal. This and all other tables: a csv, parquet, xlsx or DuckDB "
        "file, or the word postgresql, each with its keys under [inputs.source.deals]."
    )
    prices: Path | None = Field(
        None,
        description="Daily closes: security, date, close, volume. Must be there unless the "
        "study has [outcome].",
    )
    benchmarks: Path | None = Field(
        None, description="Index levels: exchange, date, close. Must be there as well."
    )
    candidates: Path | None = Field(
        None, description="Companies by year that could have announced, for the selection model."
    )
    factors: Path | None = Field(
        None, description="Daily factor returns, decimal: exchange, date, one column a factor."
    )
    peers: Path | None = Field(
        None, description="Companies a company is compared with: security, peer, perhaps exchange."
    )
    listings: Path | None = Field(
        None,
        description="Lines of companies listed more than once: security, line (its code among the "
        "prices), exchange, perhaps primary, home, currency.",
    )
    news: Path | None = Field(
        None, description="Other news of companies: security, date, kind (guidance, dividend)."
    )
    restricted: Path | None = Field(
        None,
        description="The house's restricted list: security. A deal of one of its companies stops "
        "the run.",
    )
    rates: Path | None = Field(
        None,
        description="Exchange rates: date, currency, rate (what one unit of it costs in the common "
        "currency).",
    )
    delistings: Path | None = Field(
        None,
        description="Securities that left their exchange: security, date, return (decimal), reason "
        "('performance' where the company failed).",
    )
    columns: dict[TableName, dict[str, str]] = Field(
        default_factory=dict,
        description="Your column names: [inputs.columns.deals] announced_at = 'Announced'.",
    )
    sheets: dict[TableName, str] = Field(
        default_factory=dict, description="Sheet of an xlsx file, by table; the first if absent."
    )
    source: dict[TableName, SourceKeys] = Field(
        default_factory=dict,
        description="How a table is written: [inputs.source.prices] delimiter = ';'.",
    )
    connection: str = Field(
        "",
        description="Environment variable that holds the connection to PostgreSQL; if not said, "
        "PGHOST, PGDATABASE, PGUSER and the others. Never write it here.",
    )
    history: Literal["touched", "whole"] = Field(
        "touched",
        description="Prices that are read: of the sessions around deals and the dates of "
        "candidates, or the whole history of their securities, so that faults on other dates are "
        "told too.",
    )
    timestamp_zone: str = Field(
        "", description="Time zone of announcements without one, e.g. Europe/London."
    )
    date_format: str = Field(
        "",
        description="Format of dates that are not YYYY-MM-DD, e.g. '%d/%m/%Y %H:%M'; 'excel' or "
        "'excel 1904' for days counted by a spreadsheet.",
    )


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
    peers: str = Field(
        "",
        description="Column of deals and candidates whose equals are peers, such as industry; "
        "not needed with inputs.peers.",
    )
    fewest_peers: int = Field(5, ge=1, description="Peers a deal must have for that comparison.")

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
        default_factory=lambda: [entry.key for entry in TABLE[TESTS] if entry.default],
        description="Tests shown, in this order.",
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
            raise misfit(f"{self.window} in 'window'", ORDERED)
        if self.lag and self.column is None:
            raise ValueError("lag needs a column of the candidates")
        return self


SOURCES = ("column", "ratio", "interaction", "indicator", "price")


class Report(Part):
    """How the documents look."""

    groups: Annotated[list[str], Field(min_length=2, max_length=2)] = Field(
        default_factory=lambda: ["without", "with"],
        description="The two values of the treatment in words: untreated, treated.",
    )
    formats: list[Format] = Field(
        default_factory=lambda: [entry.key for entry in TABLE[FORMATS] if entry.default],
        description="What is written; 'pdf' is the memo as a PDF.",
    )
    currency: str = Field("", description="Of the money columns, with scale: USD million.")
    deal_pages: int = Field(
        1_000,
        ge=0,
        description="Of how many deals, the first of the list, a page is made beside the report; "
        "dealwake deal STUDY ID --page FILE makes that of any deal.",
    )


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
    outcome: Outcome | None = Field(
        None, description="An outcome that the deal list holds, in place of measured returns."
    )
    deal_list: DealList = Field(default_factory=DealList)
    event_time: EventTime = Field(default_factory=EventTime)
    series: Series = Field(default_factory=Series)
    currency: Currency = Field(default_factory=Currency)
    screens: Screens = Field(default_factory=Screens)
    calendars: dict[str, Calendar] = Field(
        default_factory=dict, description="Changes of exchange calendars, by ISO 10383 code."
    )
    expected_returns: ExpectedReturns = Field(default_factory=ExpectedReturns)
    benchmark_checks: BenchmarkChecks = Field(default_factory=BenchmarkChecks)
    tests: Tests = Field(default_factory=Tests)
    placebo: Placebo = Field(default_factory=Placebo)
    calendar_time: CalendarTime = Field(default_factory=CalendarTime)
    matched_control: MatchedControl = Field(default_factory=MatchedControl)
    characteristics: dict[str, Characteristic] = Field(default_factory=dict)
    regression: Regression | None = None
    selection: Selection | None = None
    instruments: Instruments | None = None
    bounds: Bounds | None = None
    fit: Fit = Field(default_factory=Fit)
    scrutiny: Scrutiny = Field(default_factory=Scrutiny)
    labels: dict[str, str] = Field(
        default_factory=dict, description="Words for variables: paid_in_shares = 'Paid in shares'."
    )
    report: Report = Field(default_factory=Report)
    papers: Papers = Field(default_factory=Papers)
    compute: Compute = Field(default_factory=Compute)

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
