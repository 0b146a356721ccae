"""From the tables to the abnormal returns of the deals kept."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.clock import Clock
from pipeline.core.findings import Finding, raise_errors
from pipeline.core.ledger import Ledger
from pipeline.core.prices import PricePanel
from pipeline.core.window import Window
from pipeline.inputs.read import Tables, read_inputs
from pipeline.registry import (
    EXPECTED_RETURNS,
    TESTS,
    entry,
)
from pipeline.returns.events import (
    keep_first_of_overlapping,
    locate,
    masked_sessions,
)
from pipeline.returns.measure import measure
from pipeline.returns.panel import build_panels
from pipeline.returns.placebo import pseudo_events
from pipeline.returns.screens import (
    jumps_near_events,
    refuse_empty,
    screen_estimation,
    screen_event,
)
from pipeline.significance.choice import leading_test
from pipeline.significance.dependence import links
from pipeline.significance.placebo import placebo_sizes
from pipeline.study import plan
from pipeline.study.schema import Study


@dataclass(frozen=True, slots=True)
class Measured:
    """What stands after the abnormal returns: the deals kept, their returns, how they got here."""

    deals: Any
    abnormal: Mapping[str, AbnormalReturns]
    panels: Mapping[str, PricePanel]
    ledger: Ledger
    findings: tuple[Finding, ...]
    tables: Tables
    windows: tuple[Window, ...]


def measure_deals(study: Study, clock: Clock) -> Measured:
    """Inputs, day zero, abnormal returns and the screens between them."""
    options = plan.event_options(study)
    with clock.stage("inputs"):
        tables = read_inputs(
            plan.sources(study),
            plan.wanted(study),
            zone=study.inputs.timestamp_zone,
            date_format=study.inputs.date_format,
        )
    with clock.stage("sessions and prices"):
        panels, calendars, found = build_panels(
            tables.listings,
            tables.prices,
            tables.benchmarks,
            tables.factors,
            tables.factor_names,
            plan.calendar_changes(study),
        )
        raise_errors(found)
        located, at_zero = locate(tables.deals, panels, calendars, options)
        raise_errors(jumps_near_events(located, panels, options))
        first, repeats = keep_first_of_overlapping(located, options.headline)
    ledger = Ledger((tables.ledger, at_zero, repeats))
    refuse_empty(len(first), ledger)
    with clock.stage("abnormal returns"):
        masked = masked_sessions(first, located, options.estimation, options.mask_sessions)
        abnormal = {
            key: measure(
                key,
                entry(EXPECTED_RETURNS, key).load(),
                first,
                masked,
                panels,
                options.estimation,
                options.span,
            )
            for key in study.expected_returns.all_models
        }
        lead = study.expected_returns.headline
        usable, at_estimation = screen_estimation(first, abnormal[lead], panels, masked, options)
        abnormal = {key: item.select(usable) for key, item in abnormal.items()}
        traded, at_event = screen_event(abnormal[lead], options.headline)
        abnormal = {key: item.select(traded) for key, item in abnormal.items()}
    ledger = ledger.then(at_estimation, at_event)
    refuse_empty(ledger.rows_kept, ledger)
    deals = first[usable][traded].reset_index(drop=True)
    windows = plan.windows(study, bool(deals["timing"].str.startswith("date only").any()))
    findings = tables.findings + tuple(found)
    return Measured(deals, abnormal, panels, ledger, findings, tables, windows)


def tests_of(study: Study, deals: int) -> tuple[str, ...]:
    """The test that leads, then the others."""
    return tuple(dict.fromkeys([leading_test(study.tests.headline, deals), *study.tests.use]))


def placebo_of(study: Study, measured: Measured, mean: float, clock: Clock) -> Any:
    """The tests on dates without an announcement, if the study asks for them."""
    asked, window = study.placebo, study.event_time.headline_window
    model = study.expected_returns.headline
    lead = measured.abnormal[model]
    samples: Iterable[AbnormalReturns] = ()
    if asked.draws and len(lead.deals) > 1:
        samples = pseudo_events(
            model,
            entry(EXPECTED_RETURNS, model).load(),
            measured.deals,
            measured.panels,
            study.event_time.estimation_window,
            window,
            draws=asked.draws,
            distance=asked.distance,
            minimum_observations=study.event_time.minimum_observations,
            seed=study.seed,
        )
    tests = {
        key: entry(TESTS, key).load()
        for key in tests_of(study, len(lead.deals))
        if not entry(TESTS, key).resamples
    }
    with clock.stage("placebo dates"):
        return placebo_sizes(samples, window, tests, links(lead), lead.deals, mean, 1 - study.level)
