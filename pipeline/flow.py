"""The stages in order: the only place that knows the order. No number is made here."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from typing import Any

from pipeline.characteristics.design import Prepared, prepare, price_measures
from pipeline.characteristics.outcomes import (
    deals_frame,
    group_names,
    outcomes_by_choice,
    samples_without,
    with_outcomes,
)
from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.clock import Clock, Progress
from pipeline.core.design import FitOptions
from pipeline.core.estimate import Column, Diagnostic, Estimate, EstimationFailed, Withheld
from pipeline.core.findings import Finding, findings_frame, problem, raise_errors
from pipeline.core.ledger import Ledger, LedgerEntry
from pipeline.core.prices import PricePanel
from pipeline.core.results import Results
from pipeline.core.scrutiny import Direction, Variant, direction_frame, together
from pipeline.core.tables import (
    abnormal_returns_frame,
    diagnostics_frame,
    estimates_frame,
    event_tests_frame,
    ladder_frame,
    no_frame,
)
from pipeline.core.window import Window
from pipeline.estimators.checks import with_checks
from pipeline.estimators.ladder import Rung, ladder
from pipeline.inputs.read import Tables, read_inputs
from pipeline.registry import (
    ESTIMATORS,
    EXPECTED_RETURNS,
    PRICE_MEASURES,
    TESTS,
    entry,
    keys,
)
from pipeline.report.headline import headline_frame
from pipeline.returns.events import (
    keep_first_of_overlapping,
    locate,
    locate_candidates,
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
from pipeline.scrutiny.scrutinise import scrutinise
from pipeline.scrutiny.specifications import specifications
from pipeline.significance.averages import averages_of, groups_of
from pipeline.significance.checks import sample_checks
from pipeline.significance.choice import leading_test
from pipeline.significance.dependence import links
from pipeline.significance.paths import average_paths
from pipeline.significance.placebo import placebo_sizes
from pipeline.significance.power import power_of
from pipeline.significance.story import Story, story_of
from pipeline.significance.variants import FLAGS, mean_variants
from pipeline.significance.windows import all_windows
from pipeline.study import plan
from pipeline.study.schema import Study


@dataclass(frozen=True, slots=True)
class Doubts:
    """What the scrutiny of the columns found; empty if there are none."""

    rungs: tuple[Rung, ...] = ()
    variants: tuple[Variant, ...] = ()
    checks: tuple[Diagnostic, ...] = ()
    directions: tuple[Direction, ...] = ()
    notes: tuple[str, ...] = ()
    specifications: tuple[Any, Any] | None = None


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


def run(study: Study, progress: Progress = lambda _: None) -> tuple[Results, Mapping[str, float]]:
    """All stages of a study.

    Returns:
        The results, and the seconds each stage took.

    Raises:
        InputProblem: with every finding of the stage that could not go on.
    """
    clock = Clock(progress)
    measured = measure_deals(study, clock)
    with clock.stage("tests"):
        tests = {key: entry(TESTS, key).load() for key in _tests(study, len(measured.deals))}
        windows = measured.windows
        assumes = {key: entry(TESTS, key).assumes for key in tests}
        found = all_windows(
            measured.abnormal,
            windows,
            tests,
            assumes,
            study.event_time.share_of_days,
            study.level,
            study.seed,
            [key for key in tests if entry(TESTS, key).resamples],
        )
    placebo = _placebo(study, measured, found[0].mean, clock)
    with clock.stage("characteristics"):
        prepared = _prepare(study, measured)
    columns: tuple[Column, ...] = ()
    doubts = Doubts()
    if prepared is not None:
        with clock.stage("estimators"):
            columns = tuple(_fit(study, key, prepared) for key in study.columns)
        doubts = _scrutinise(study, measured, prepared, columns, clock)
    with clock.stage("results"):
        results = _results(study, measured, found, prepared, columns, placebo, doubts)
    return results, clock.seconds


def check(study: Study, progress: Progress = lambda _: None) -> tuple[Ledger, tuple[Finding, ...]]:
    """Everything up to the arrays of the regression; nothing is estimated.

    Raises:
        InputProblem: as :func:`run` would.
    """
    clock = Clock(progress)
    measured = measure_deals(study, clock)
    with clock.stage("characteristics"):
        prepared = _prepare(study, measured)
    if prepared is None:
        return measured.ledger, measured.findings
    return measured.ledger.then(prepared.ledger), measured.findings + prepared.findings


def deal(
    study: Study, name: str, progress: Progress = lambda _: None
) -> tuple[Story | None, Mapping[str, Any], list[tuple[str, LedgerEntry]]]:
    """One deal: its story if it was measured, its row, and what the ledger says of it.

    Raises:
        InputProblem: as :func:`check` would, or if the deal list has no such deal.
    """
    measured = measure_deals(study, Clock(progress))
    listed = measured.tables.deals
    if name not in set(listed["deal_id"]):
        raise problem(
            "unknown_variable",
            "deals",
            column="deal_id",
            got=f"'{name}'",
            expected="an identifier of the deal list, such as " + ", ".join(listed["deal_id"][:3]),
            remedy="Write it as in the deal list.",
        )
    told = [(stage, item) for stage, item in measured.ledger if item.deal.split(" (")[0] == name]
    kept = measured.deals[measured.deals["deal_id"] == name]
    source = kept if len(kept) else listed[listed["deal_id"] == name]
    lead = measured.abnormal[study.expected_returns.headline]
    window = study.event_time.headline_window
    row = {str(key): value for key, value in source.iloc[0].items()}
    return story_of(name, lead, window, study.level), row, told


def power(study: Study, progress: Progress = lambda _: None) -> tuple[Any, int]:
    """The chance of finding a mean of a given size with the study's deals, and their number.

    Returns:
        ``effect, power, deals_needed`` (effect decimal), and the deals measured.
    """
    measured = measure_deals(study, Clock(progress))
    lead = measured.abnormal[study.expected_returns.headline]
    return power_of(lead, study.event_time.headline_window), len(lead.deals)


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


def _tests(study: Study, deals: int) -> tuple[str, ...]:
    """The test that leads, then the others."""
    return tuple(dict.fromkeys([leading_test(study.tests.headline, deals), *study.tests.use]))


def _prepare(study: Study, measured: Measured) -> Prepared | None:
    roles = plan.roles(study)
    if roles is None:
        return None
    book = plan.recipes(study)
    functions = {key: entry(PRICE_MEASURES, key).load() for key in keys(PRICE_MEASURES)}
    deals = _with_outcomes(study, measured)
    candidates = measured.tables.candidates
    on_candidates = {}
    if candidates is not None:
        candidates = locate_candidates(candidates, measured.panels)
        on_candidates = price_measures(list(book.values()), candidates, measured.panels, functions)
    on_deals = price_measures(list(book.values()), deals, measured.panels, functions)
    return prepare(deals, candidates, book, on_deals, on_candidates, roles)


def _placebo(study: Study, measured: Measured, mean: float, clock: Clock) -> Any:
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
        for key in _tests(study, len(lead.deals))
        if not entry(TESTS, key).resamples
    }
    with clock.stage("placebo dates"):
        return placebo_sizes(samples, window, tests, links(lead), lead.deals, mean, 1 - study.level)


def _scrutinise(
    study: Study,
    measured: Measured,
    prepared: Prepared,
    columns: tuple[Column, ...],
    clock: Clock,
) -> Doubts:
    """What would overturn the finding, and how much hangs on the errors."""
    if not study.scrutiny.run or _lead(columns) < 0:
        return Doubts()
    design = prepared.design
    with clock.stage("scrutiny"):
        options = plan.scrutiny_options(study, prepared.groups)
        found = scrutinise(design, columns, _lead(columns), options)
        rungs = ladder(design, FitOptions(level=study.level))
        cells = _specifications(study, measured, prepared) if study.scrutiny.grid.run else None
    return Doubts(rungs, found.variants, found.checks, found.directions, found.notes, cells)


def _specifications(study: Study, measured: Measured, prepared: Prepared) -> tuple[Any, Any]:
    """The specification curve over the study's own windows, models and flags."""
    asked, rows = study.scrutiny.grid, prepared.design.rows
    share = study.event_time.share_of_days
    return specifications(
        prepared.design,
        outcomes_by_choice(measured.abnormal, measured.windows, share, rows),
        samples_without(measured.ledger, rows, FLAGS),
        asked.control_sets,
        asked.winsorise,
        asked.permutations,
        study.seed,
        plan.fit_options(study),
    )


def _with_outcomes(study: Study, measured: Measured) -> Any:
    time = study.event_time
    lead = measured.abnormal[study.expected_returns.headline]
    return with_outcomes(measured.deals, lead, measured.windows, time.share_of_days)


def _fit(study: Study, key: str, prepared: Prepared) -> Column:
    options = plan.fit_options(study)
    try:
        estimate: Estimate = entry(ESTIMATORS, key).load()(prepared.design, options)
    except EstimationFailed as failure:
        return Withheld(key, key.replace("_", " "), failure.reason)
    return with_checks(estimate)


def _results(
    study: Study,
    measured: Measured,
    found: Any,
    prepared: Prepared | None,
    columns: tuple[Column, ...],
    placebo: Any,
    doubts: Doubts,
) -> Results:
    leading = leading_test(study.tests.headline, len(measured.deals))
    facts = plan.facts(study, leading, measured.windows)
    lead_model = study.expected_returns.headline
    lead = measured.abnormal[lead_model]
    deals = prepared.deals if prepared else _with_outcomes(study, measured)
    groups = group_names(deals, facts.treatment, facts.groups)
    table = deals_frame(deals, groups)
    checks = sample_checks(lead, study.event_time.headline_window, deals)
    for column in columns:
        checks += () if isinstance(column, Withheld) else column.checks
    checks += doubts.checks
    ledger = measured.ledger.then(prepared.ledger) if prepared else measured.ledger
    findings = measured.findings + (prepared.findings if prepared else ())
    results = Results(
        study=facts,
        abnormal=measured.abnormal,
        deals=table,
        window_tests=found,
        columns=columns,
        lead=_lead(columns),
        paths=average_paths(lead, groups, plan.path_days(study), study.level, study.seed),
        averages=averages_of(lead, facts.headline, deals, study.level),
        groups=groups_of(lead, facts.headline, groups, facts.groups),
        diagnostics=diagnostics_frame(checks),
        sensitivity=together(
            mean_variants(measured.abnormal, facts.headline, ledger, study.level), doubts.variants
        ),
        ledger=ledger,
        findings=findings,
        tables={},
        placebo=placebo,
        power=power_of(lead, facts.headline),
        ladder=ladder_frame(doubts.rungs),
        directions=direction_frame(doubts.directions),
        doubts=doubts.notes,
        specifications=doubts.specifications[0] if doubts.specifications else no_frame(),
        curve=doubts.specifications[1] if doubts.specifications else no_frame(),
    )
    tables = {
        "abnormal_returns": abnormal_returns_frame(measured.abnormal),
        "deals": table,
        "event_tests": event_tests_frame(found),
        "estimates": estimates_frame(columns, facts.headline, lead_model),
        "diagnostics": results.diagnostics,
        "sensitivity": results.sensitivity,
        "ledger": ledger.frame(),
        "findings": findings_frame(findings),
        "paths": results.paths,
        "placebo": results.placebo,
        "power": results.power,
        "ladder": results.ladder,
        "directions": results.directions,
        "averages": results.averages,
        "groups": results.groups,
        "specifications": results.specifications,
        "curve": results.curve,
    }
    return replace(results, tables={**tables, "headline": headline_frame(results)})


def _lead(columns: tuple[Column, ...]) -> int:
    """The column that accounts for most of the choice; -1 if none gave a number."""
    ranks = [
        -1 if isinstance(column, Withheld) else entry(ESTIMATORS, column.estimator).answers
        for column in columns
    ]
    return ranks.index(max(ranks)) if ranks and max(ranks) >= 0 else -1
