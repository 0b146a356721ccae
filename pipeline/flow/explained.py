"""From abnormal returns to the columns of the comparison table and the doubts about them."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from pipeline.characteristics.design import Prepared, prepare, price_measures
from pipeline.characteristics.outcomes import (
    outcomes_by_choice,
    samples_without,
    with_outcomes,
)
from pipeline.core.clock import Clock
from pipeline.core.design import FitOptions
from pipeline.core.estimate import Column, Diagnostic, Estimate, EstimationFailed, Withheld
from pipeline.core.scrutiny import Direction, Variant
from pipeline.estimators.checks import with_checks
from pipeline.estimators.ladder import Rung, ladder
from pipeline.flow.measured import Measured
from pipeline.registry import (
    ESTIMATORS,
    PRICE_MEASURES,
    entry,
    keys,
)
from pipeline.returns.events import (
    locate_candidates,
)
from pipeline.scrutiny.scrutinise import scrutinise
from pipeline.scrutiny.specifications import specifications
from pipeline.significance.variants import FLAGS
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


def prepared_of(study: Study, measured: Measured) -> Prepared | None:
    """The arrays of the regression, or None without one."""
    roles = plan.roles(study)
    if roles is None:
        return None
    book = plan.recipes(study)
    functions = {key: entry(PRICE_MEASURES, key).load() for key in keys(PRICE_MEASURES)}
    deals = deals_with_outcomes(study, measured)
    candidates = measured.tables.candidates
    on_candidates = {}
    if candidates is not None:
        candidates = locate_candidates(candidates, measured.panels)
        on_candidates = price_measures(list(book.values()), candidates, measured.panels, functions)
    on_deals = price_measures(list(book.values()), deals, measured.panels, functions)
    return prepare(deals, candidates, book, on_deals, on_candidates, roles)


def deals_with_outcomes(study: Study, measured: Measured) -> Any:
    """The deals with a column for the CAR of each window."""
    time = study.event_time
    lead = measured.abnormal[study.expected_returns.headline]
    return with_outcomes(measured.deals, lead, measured.windows, time.share_of_days)


def column_of(study: Study, key: str, prepared: Prepared) -> Column:
    """One estimator's column, or the reason there is none."""
    options = plan.fit_options(study)
    try:
        estimate: Estimate = entry(ESTIMATORS, key).load()(prepared.design, options)
    except EstimationFailed as failure:
        return Withheld(key, key.replace("_", " "), failure.reason)
    return with_checks(estimate)


def doubts_of(
    study: Study,
    measured: Measured,
    prepared: Prepared,
    columns: tuple[Column, ...],
    clock: Clock,
) -> Doubts:
    """What would overturn the finding, and how much hangs on the errors."""
    if not study.scrutiny.run or lead_of(columns) < 0:
        return Doubts()
    design = prepared.design
    with clock.stage("scrutiny"):
        options = plan.scrutiny_options(study, prepared.groups)
        found = scrutinise(design, columns, lead_of(columns), options)
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


def lead_of(columns: tuple[Column, ...]) -> int:
    """The column that accounts for most of the choice; -1 if none gave a number."""
    ranks = [
        -1 if isinstance(column, Withheld) else entry(ESTIMATORS, column.estimator).answers
        for column in columns
    ]
    return ranks.index(max(ranks)) if ranks and max(ranks) >= 0 else -1
