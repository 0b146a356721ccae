"""The stages in the order of each command."""

from __future__ import annotations

from collections.abc import Mapping
from contextlib import AbstractContextManager
from typing import TYPE_CHECKING, Any

from pipeline.core.clock import Clock, Progress
from pipeline.core.estimate import Column
from pipeline.core.findings import Finding, problem
from pipeline.core.ledger import Ledger, LedgerEntry
from pipeline.core.outcome import Standing
from pipeline.core.results import Results
from pipeline.core.tables import no_frame
from pipeline.estimators.workers import shared_by
from pipeline.flow.explained import column_of, deals_with_outcomes, lead_of, prepared_of
from pipeline.flow.measured import Measured, measure_deals, placebo_of, tests_of
from pipeline.flow.ready import ready_deals, ready_standing
from pipeline.flow.seen import refuse_changed
from pipeline.registry import (
    TESTS,
    entry,
)
from pipeline.study.schema import Study

if TYPE_CHECKING:
    from pipeline.significance.story import Story

# What only some commands need is imported by them: libraries take a second to load.


def run(
    study: Study, progress: Progress = lambda _: None, fresh: bool = False
) -> tuple[Results, Mapping[str, float]]:
    """All stages of a study; ``fresh`` makes again what an earlier run has kept.

    Returns:
        The results, and the seconds each stage took.

    Raises:
        InputProblem: with every finding of the stage that could not go on.
    """
    clock = Clock(progress)
    return _all_stages(study, clock, fresh), clock.seconds


def _all_stages(study: Study, clock: Clock, fresh: bool = False, deal: str = "") -> Results:
    """As :func:`run`; a ``deal`` has what its page is made from whatever its place in the list."""
    with _workers(study):
        return _made(study, clock, fresh, deal)


def _workers(study: Study) -> AbstractContextManager[None]:
    """Those that the study names, who are asked before any work is done."""
    return shared_by(study.compute.backend, study.compute.scheduler, study.compute.workers)


def _made(study: Study, clock: Clock, fresh: bool, deal: str) -> Results:
    from pipeline.flow.assembled import results_of
    from pipeline.flow.dealt import with_deal_frames
    from pipeline.flow.doubted import Doubts, doubts_of
    from pipeline.flow.pictured import with_pictures
    from pipeline.flow.selected import selected_of, with_selection

    measured = deals_of(study, clock, fresh)
    found, (placebo, draws) = reactions_of(study, measured, clock)
    with clock.stage("characteristics"):
        prepared = prepared_of(study, measured)
    columns: tuple[Column, ...] = ()
    doubts = Doubts()
    if prepared is not None:
        with clock.stage("estimators"):
            columns = tuple(column_of(study, key, prepared) for key in study.columns)
        doubts = doubts_of(study, measured, prepared, columns, lead_of(columns), clock)
    with clock.stage("results"):
        results = results_of(study, measured, found, prepared, columns, placebo, doubts)
        results = with_pictures(results, study, measured, prepared, draws)
        results = with_deal_frames(results, study, measured, prepared, deal)
    if prepared is not None:
        deals = deals_with_outcomes(study, measured)
        results = with_selection(results, selected_of(study, measured, deals, prepared, clock))
    with clock.stage("results"):
        refuse_changed(study, results.digests)
    return results


def deals_of(study: Study, clock: Clock, fresh: bool = False) -> Measured:
    """The deals with an outcome: measured from prices, or as the deal list holds it."""
    if study.outcome is not None:
        return ready_deals(study, clock)
    return measure_deals(study, clock, fresh)


def reactions_of(study: Study, measured: Measured, clock: Clock) -> tuple[Any, Any]:
    """The tests of every window and the placebo dates; nothing where no return was measured."""
    if study.outcome is not None:
        return (), (no_frame(), no_frame())
    from pipeline.significance.windows import all_windows

    with clock.stage("tests"):
        tests = {key: entry(TESTS, key).load() for key in tests_of(study, len(measured.deals))}
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
    return found, placebo_of(study, measured, found[0].mean, clock)


def check(study: Study, progress: Progress = lambda _: None) -> tuple[Ledger, tuple[Finding, ...]]:
    """Everything up to the arrays of the regression; nothing is estimated.

    Raises:
        InputProblem: as :func:`run` would.
    """
    clock = Clock(progress)
    with _workers(study):
        measured = deals_of(study, clock)
    with clock.stage("characteristics"):
        prepared = prepared_of(study, measured)
    if prepared is None:
        return measured.ledger, measured.findings
    return measured.ledger.then(prepared.ledger), measured.findings + prepared.findings


def deal(
    study: Study, name: str, progress: Progress = lambda _: None
) -> tuple[Story | Standing | None, Mapping[str, Any], list[tuple[str, LedgerEntry]]]:
    """One deal: its story if it has an outcome, its row, and what the ledger says of it.

    Raises:
        InputProblem: as :func:`check` would, or if the deal list has no such deal.
    """
    from pipeline.significance.story import story_of

    measured = deals_of(study, Clock(progress))
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
    row = {str(key): value for key, value in source.iloc[0].items()}
    if study.outcome is not None:
        return ready_standing(study, measured.deals, name), row, told
    lead = measured.abnormal[study.expected_returns.headline]
    window = study.event_time.headline_window
    return story_of(name, lead, window, study.level), row, told


def deal_page(study: Study, name: str, progress: Progress = lambda _: None) -> Any:
    """All stages of a study, and the page of one of its deals as a document.

    Raises:
        InputProblem: as :func:`run` would, or if no such deal was measured.
    """
    from pipeline.report.deal_pages import Book, document

    results = _all_stages(study, Clock(progress), deal=name)
    known = results.deals["deal"].astype(str)
    if name not in set(known):
        raise problem(
            "unknown_variable",
            "deals",
            column="deal_id",
            got=f"'{name}'",
            expected="a deal that was measured, such as " + ", ".join(known[:3]),
            remedy="Write it as in the deal list; without --page and --whole the command says why "
            "a deal was left out.",
        )
    return document(Book.of(results, [name]), name)


def power(study: Study, progress: Progress = lambda _: None) -> tuple[Any, float, int]:
    """The chance of finding a mean of a given size with the study's deals, and their number.

    Returns:
        ``effect, power, deals_needed`` (effect decimal), the smallest mean found four times in five
        (decimal), and the deals measured.

    Raises:
        InputProblem: as :func:`check` would, or ``outcome_and_returns`` for an outcome that the
            deal list holds.
    """
    from pipeline.significance.power import detectable_of, power_of

    if study.outcome is not None:
        raise problem(
            "outcome_and_returns",
            "study file",
            column="outcome",
            got="an outcome that the deal list holds",
            expected="returns measured from prices, whose mean the power is about",
            remedy="Run the study: its intervals say what these deals can tell apart.",
        )
    measured = measure_deals(study, Clock(progress))
    lead = measured.abnormal[study.expected_returns.headline]
    window = study.event_time.headline_window
    return power_of(lead, window), detectable_of(lead, window), len(lead.deals)
