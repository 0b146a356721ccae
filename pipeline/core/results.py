"""Everything a run found, in one value: what the report reads and the data files hold."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field

import pandas as pd

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.estimate import Column, Tested
from pipeline.core.findings import Finding
from pipeline.core.house import PLAIN, House
from pipeline.core.ledger import Ledger
from pipeline.core.outcome import ABNORMAL_RETURN, Outcome
from pipeline.core.window import Window

# What a variable that an estimator adds is called.
OWN_WORDS = {"inverse_mills": "inverse Mills ratio"}


@dataclass(frozen=True, slots=True)
class StudyFacts:
    """What the report may know of the study file.

    Attributes:
        name: the study's short name, its folder under ``reports/``.
        title, question: as written by the analyst.
        headline: the window declared before looking; ``windows`` holds it and the secondary ones.
        estimation: the estimation window.
        minimum_observations: returns an estimation window must hold.
        models: expected-return model keys, the headline one first.
        headline_test: key of the test that leads; ``headline_test_reason`` says why, in words.
        treatment: the deal feature asked about ('' if the study asks about the mean alone).
        groups: the two payment forms (or other treatment values) in words: (untreated, treated).
        regressors, effects, clusters, instruments, excluded, selection: names.
        rationales: heading -> the analyst's argument, printed verbatim.
        labels: variable name -> its words on a page.
        notes: conventions used, one sentence each (day zero, missing data, return basis).
        level: confidence level.
        currency: of the money columns, with the scale, e.g. ``USD million``.
        seed: of every random stream.
        outcome: what is explained. An outcome that the deal list holds has no windows, and the
            fields about windows, models and tests mean nothing then.
        house: the style of the papers.
        deal_pages: of how many deals, the first ones, a page is made beside the report.
    """

    name: str
    title: str
    question: str
    headline: Window
    windows: tuple[Window, ...]
    estimation: Window
    minimum_observations: int
    models: tuple[str, ...]
    headline_test: str
    headline_test_reason: str
    treatment: str = ""
    groups: tuple[str, str] = ("", "")
    regressors: tuple[str, ...] = ()
    effects: tuple[str, ...] = ()
    clusters: tuple[str, ...] = ()
    instruments: tuple[str, ...] = ()
    excluded: tuple[str, ...] = ()
    selection: tuple[str, ...] = ()
    rationales: Mapping[str, str] = field(default_factory=dict)
    labels: Mapping[str, str] = field(default_factory=dict)
    notes: tuple[str, ...] = ()
    level: float = 0.95
    currency: str = ""
    seed: int = 0
    outcome: Outcome = ABNORMAL_RETURN
    house: House = PLAIN
    deal_pages: int = 0

    @property
    def explained(self) -> dict[str, str | int]:
        """What the estimates explain, as columns of a frame."""
        if self.outcome.ready:
            return {"outcome": self.outcome.column}
        return {
            "window_start": self.headline.start,
            "window_end": self.headline.end,
            "expected_return": self.models[0],
        }

    def words(self, name: str) -> str:
        """A variable's label, or its name with spaces."""
        return self.labels.get(name) or OWN_WORDS.get(name, name.replace("_", " "))


@dataclass(frozen=True, slots=True)
class WindowTests:
    """All tests of the mean abnormal return in one window under one expected-return model.

    ``mean``, ``median`` and ``std_dev`` are decimal CARs over ``n`` deals; ``share_positive`` is
    a fraction; ``interval`` is the headline test's (low, high) for the mean, decimal.
    """

    window: Window
    model: str
    n: int
    mean: float
    median: float
    std_dev: float
    share_positive: float
    interval: tuple[float, float]
    tests: Mapping[str, Tested]
    p_holm: Mapping[str, float] = field(default_factory=dict)


@dataclass(frozen=True, slots=True, eq=False)
class Results:
    """One run.

    Attributes:
        study: the facts of the study file.
        abnormal: expected-return model -> abnormal returns of the deals kept.
        deals: one row a deal kept: ``deal``, keys, outcomes ``car_<start>_<end>`` (decimal),
            characteristics; ``market_value`` in money when known.
        window_tests: one entry a window and model, the headline window and model first.
        columns: the comparison table's columns, in order.
        lead: index in ``columns`` of the column that answers the question, -1 without one.
        paths: ``group, day, n, mean, low, high, low_path, high_path`` of the cumulative average
            abnormal return.
        diagnostics: ``subject, check, value, threshold, verdict, meaning, source``; verdict is
            ``pass``, ``warn`` or ``fail``.
        sensitivity: ``dimension, variant, estimate, ci_low, ci_high, n`` (decimal); a column
            ``target`` names the number varied, which is the mean reaction without it.
        tables: name -> the frame written to ``data/<name>.parquet``.
        ledger, findings: as collected.
        placebo: ``test, title, rejected, draws, rate, std_error, nominal``: what the tests do on
            dates without an announcement; empty if not asked for. The row ``mean`` holds the
            share of draws whose mean is as far from zero as the sample's.
        power: ``effect, power, deals_needed``; effect decimal.
        ladder: ``name, std_error, df, p, low, high, note``: the least-squares effect's error under
            every treatment of it, decimal.
        directions: ``factor, on_outcome, on_treatment, bias, true_effect, evidence`` of suspected
            flaws.
        averages: ``average, value, std_error, ci_low, ci_high, n, meaning`` of the headline window.
        groups: ``test, first, second, n_first, n_second, difference, statistic, df, p_value,
            source``: treated deals against the others.
        specifications: one row a way to make the least-squares estimate, the headline's first;
            ``curve`` is ``name, value`` of all of them together.
        several_windows: one row a model and window with the p-value of its mean, and that of the
            secondary windows adjusted for their number.
        calendar_time: one row a horizon, weighting and regression of the portfolios that hold
            every recent deal's company; decimal.
        matched: one row a window and deal: buy-and-hold returns of its company and its control.
        buy_and_hold: one row a window: the mean difference of the two, with its tests.
        summary: ``group, n, mean, median, std_dev, share_positive, std_error, df, ci_low, ci_high,
            clusters`` of an outcome that the deal list holds, all deals first; else empty.
        selection: name -> frame of the review of who announces, the expected gains and the bounds;
            only what was asked for.
        readings: the headline and the test that leads under another date or listing of the same
            deals, decimal, the headline's own row first; empty without one.
        look: makes the HTML that a notebook shows; None leaves it to the notebook.
        digests: table -> SHA-256 of the file read, or of what a query gave.
        doubts: sentences on what the scrutiny could not ask.
    """

    study: StudyFacts
    abnormal: Mapping[str, AbnormalReturns]
    deals: pd.DataFrame
    window_tests: tuple[WindowTests, ...]
    columns: tuple[Column, ...]
    lead: int
    paths: pd.DataFrame
    diagnostics: pd.DataFrame
    sensitivity: pd.DataFrame
    ledger: Ledger
    findings: tuple[Finding, ...]
    tables: Mapping[str, pd.DataFrame]
    placebo: pd.DataFrame = field(default_factory=pd.DataFrame)
    power: pd.DataFrame = field(default_factory=pd.DataFrame)
    ladder: pd.DataFrame = field(default_factory=pd.DataFrame)
    directions: pd.DataFrame = field(default_factory=pd.DataFrame)
    doubts: tuple[str, ...] = ()
    averages: pd.DataFrame = field(default_factory=pd.DataFrame)
    groups: pd.DataFrame = field(default_factory=pd.DataFrame)
    specifications: pd.DataFrame = field(default_factory=pd.DataFrame)
    curve: pd.DataFrame = field(default_factory=pd.DataFrame)
    several_windows: pd.DataFrame = field(default_factory=pd.DataFrame)
    summary: pd.DataFrame = field(default_factory=pd.DataFrame)
    calendar_time: pd.DataFrame = field(default_factory=pd.DataFrame)
    matched: pd.DataFrame = field(default_factory=pd.DataFrame)
    buy_and_hold: pd.DataFrame = field(default_factory=pd.DataFrame)
    readings: pd.DataFrame = field(default_factory=pd.DataFrame)
    selection: Mapping[str, pd.DataFrame] = field(default_factory=dict)
    digests: Mapping[str, str] = field(default_factory=dict)
    look: Callable[[Results], str] | None = field(default=None, repr=False)

    def _repr_html_(self) -> str | None:
        """How a notebook shows the run."""
        return self.look(self) if self.look else None

    @property
    def headline(self) -> WindowTests:
        """The tests of the headline window under the headline model."""
        return self.window_tests[0]
