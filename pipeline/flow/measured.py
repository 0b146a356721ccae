"""From the tables to the abnormal returns of the deals kept."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field, replace
from typing import Any

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.clock import Clock
from pipeline.core.findings import Finding, raise_errors
from pipeline.core.ledger import Ledger, StageLedger
from pipeline.core.prices import Integers, PricePanel
from pipeline.core.reading import Reading
from pipeline.core.window import Window
from pipeline.flow.peers import models_of, screen_peers
from pipeline.flow.placed import Placed, place_deals, unused_sessions
from pipeline.flow.priced import Priced, at_the_end, price_panels
from pipeline.flow.readings import readings_of
from pipeline.flow.reused import price_key, return_key, shelf_of
from pipeline.flow.seen import Seen, seen, unchanged
from pipeline.inputs.read import Tables, read_inputs
from pipeline.registry import (
    TESTS,
    entry,
)
from pipeline.returns.benchmarks import benchmark_findings, benchmark_fits, dominated
from pipeline.returns.confounding import without_news
from pipeline.returns.day_zero import times_needed
from pipeline.returns.events import EventOptions
from pipeline.returns.few import few_events
from pipeline.returns.measure import measure
from pipeline.returns.placebo import pseudo_events
from pipeline.returns.screens import (
    jumps_near_events,
    refuse_empty,
    screen_estimation,
    screen_event,
)
from pipeline.returns.trading import benchmark_in_windows, lacking_prices
from pipeline.significance.choice import leading_test
from pipeline.significance.dependence import links
from pipeline.significance.placebo import placebo_sizes
from pipeline.study import plan, plan_events, plan_prices, plan_returns
from pipeline.study.plan_reach import reach
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
    located: Any = None
    readings: tuple[Reading, ...] = ()
    measured_on: Mapping[str, PricePanel] = field(default_factory=dict)


def measure_deals(study: Study, clock: Clock, fresh: bool = False) -> Measured:
    """Inputs, day zero, abnormal returns and the screens between them.

    What took long and depends on nothing that has changed is taken from the shelf, unless
    ``fresh``.
    """
    shelf = shelf_of(study, fresh)
    with clock.stage("inputs"):
        before = seen(study)
        key = price_key(study, before.digests) if shelf.most else ""
    priced = shelf.kept(key, lambda: _priced(study, clock, before))
    found = shelf.kept(return_key(study, key), lambda: _returns(study, priced, clock))
    by_date = found.deals["timing"].str.startswith("date only").any()
    return replace(
        found,
        panels=priced.panels,
        measured_on=priced.measured_on,
        tables=replace(found.tables, digests={**found.tables.digests, **before.digests}),
        windows=plan.windows(study, bool(by_date)),
    )


def _priced(study: Study, clock: Clock, before: Seen) -> Priced:
    """The tables, and the price panels made from them.

    Raises:
        InputProblem: also ``changed_file``; nothing is kept of a file that was written meanwhile.
    """
    with clock.stage("inputs"), unchanged(study, before):
        tables = read_inputs(
            plan.sources(study),
            plan.wanted(study),
            zone=study.inputs.timestamp_zone,
            date_format=study.inputs.date_format,
            rules=plan_events.deal_rules(study),
            declared=plan_prices.quoted_files(study),
            reach=reach(study),
        )
    with clock.stage("sessions and prices"):
        return price_panels(study, tables)


def _returns(study: Study, priced: Priced, clock: Clock) -> Measured:
    """The deals kept and their abnormal returns; panels and windows are still to be put in."""
    options = plan.event_options(study)
    with clock.stage("sessions and prices"):
        placed = place_deals(
            priced.tables,
            priced.panels,
            priced.calendars,
            options,
            study.event_time.second_lines,
            priced.rates,
        )
        sound = _sound(study, placed, priced, options)
    ledger = Ledger((priced.tables.ledger, *placed.stages, *sound.stages))
    refuse_empty(len(sound.deals), ledger)
    with clock.stage("abnormal returns"):
        deals, abnormal, stages = _measured(study, sound, placed, priced, options)
    ledger = ledger.then(*stages)
    refuse_empty(ledger.rows_kept, ledger)
    lead = study.expected_returns.headline
    model = (lead, sound.models[lead])
    told = (*priced.tables.findings, *sound.findings)
    return Measured(
        deals=deals,
        abnormal=abnormal,
        panels={},
        ledger=ledger,
        findings=(*told, *few_events(deals, study.inputs.deals.name)),
        tables=placed.tables,
        windows=(),
        located=placed.located,
        readings=readings_of(placed, deals, priced.measured_on, model, options),
    )


@dataclass(frozen=True, slots=True)
class _Sound:
    """The deals whose prices and benchmark can serve, the models, and what was said of them."""

    deals: Any
    models: Mapping[str, Callable[..., Any]]
    stages: tuple[StageLedger, ...]
    findings: tuple[Finding, ...]


def _sound(study: Study, placed: Placed, priced: Priced, options: EventOptions) -> _Sound:
    """Whether prices, benchmarks and peers can serve the deals as placed.

    Raises:
        InputProblem: with what speaks against it.
    """
    panels, located, tables = priced.panels, placed.located, placed.tables
    screens, limits = plan_prices.screen_limits(study), plan_returns.benchmark_limits(study)
    raise_errors(
        [
            *lacking_prices(placed.stages[0], screens),
            *jumps_near_events(located, panels, options, screens),
            *benchmark_in_windows(located, panels, options.headline),
            *times_needed(placed.first, options.headline, study.inputs.deals.name),
        ]
    )
    fits = benchmark_fits(panels, located)
    found = benchmark_findings(panels, fits, limits)
    raise_errors(found)
    models = models_of(study, tables, located)
    deals, at_peers = screen_peers(study, tables, located, placed.first, panels)
    doubted, at_benchmark = dominated(deals, fits, tables.benchmarks, limits)
    stages = (*at_peers, *((at_benchmark,) if at_benchmark.entries else ()))
    return _Sound(deals, models, stages, (*priced.findings, *found, *doubted))


def _measured(
    study: Study, sound: _Sound, placed: Placed, priced: Priced, options: EventOptions
) -> tuple[Any, dict[str, AbnormalReturns], tuple[StageLedger, StageLedger]]:
    """The deals that stay, their abnormal returns under each model, and the last two stages."""
    first, panels, screens = sound.deals, priced.measured_on, plan_prices.screen_limits(study)
    masked = unused_sessions(first, placed.located, options, placed.news, panels)
    abnormal = {
        key: measure(key, function, first, masked, panels, options.estimation, options.span)
        for key, function in sound.models.items()
    }
    if options.confounding == "dummy":
        news = placed.news.mask(first, options.span)
        abnormal = {key: without_news(item, news) for key, item in abnormal.items()}
    lead = study.expected_returns.headline
    usable, at_estimation = screen_estimation(
        first, abnormal[lead], panels, masked, options, screens
    )
    abnormal = {key: item.select(usable) for key, item in abnormal.items()}
    traded, at_event = screen_event(
        abnormal[lead], options.headline, first[usable], priced.panels, screens
    )
    abnormal = {key: item.select(traded) for key, item in abnormal.items()}
    deals = first[usable][traded].reset_index(drop=True)
    abnormal, at_event = at_the_end(abnormal, lead, deals, at_event, priced, options)
    return deals, abnormal, (at_estimation, at_event)


def tests_of(study: Study, deals: int) -> tuple[str, ...]:
    """The test that leads, then the others."""
    return tuple(dict.fromkeys([leading_test(study.tests.headline, deals), *study.tests.use]))


def placebo_of(study: Study, measured: Measured, mean: float, clock: Clock) -> tuple[Any, Any]:
    """The tests on dates without an announcement and each draw, if the study asks for them."""
    asked, window = study.placebo, study.event_time.headline_window
    model = study.expected_returns.headline
    lead = measured.abnormal[model]
    samples: Iterable[tuple[Integers, AbnormalReturns]] = ()
    if asked.draws and len(lead.deals) > 1:
        samples = pseudo_events(
            model,
            models_of(study, measured.tables, measured.located)[model],
            measured.deals,
            measured.measured_on,
            study.event_time.estimation_window,
            window,
            draws=asked.draws,
            distance=asked.distance,
            minimum_observations=study.event_time.minimum_observations,
            seed=study.seed,
            announced=measured.located,
            around=study.event_time.mask_sessions,
        )
    tests = {
        key: entry(TESTS, key).load()
        for key in tests_of(study, len(lead.deals))
        if not entry(TESTS, key).resamples
    }
    with clock.stage("placebo dates"):
        return placebo_sizes(samples, window, tests, links(lead), mean, 1 - study.level)
