"""What would overturn the finding: the scrutiny of the columns, and the specification curve."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from pipeline.characteristics.design import Prepared
from pipeline.characteristics.outcomes import outcomes_by_choice, samples_without
from pipeline.characteristics.samples import grouped_by, meeting
from pipeline.core.clock import Clock
from pipeline.core.design import FitOptions
from pipeline.core.estimate import Column, Diagnostic
from pipeline.core.scrutiny import Direction, Variant
from pipeline.estimators.ladder import Rung, ladder
from pipeline.flow.measured import Measured
from pipeline.registry import ESTIMATORS, entry
from pipeline.scrutiny.grid import LINEAR
from pipeline.scrutiny.scrutinise import scrutinise
from pipeline.scrutiny.specifications import Wanted, specifications
from pipeline.significance.variants import FLAGS
from pipeline.study import plan
from pipeline.study.plan_scrutiny import LEFT_OUT, scrutiny_options
from pipeline.study.schema import Study


@dataclass(frozen=True, slots=True)
class Doubts:
    """What the scrutiny of the columns found; empty if there are none."""

    rungs: tuple[Rung, ...] = ()
    variants: tuple[Variant, ...] = ()
    checks: tuple[Diagnostic, ...] = ()
    directions: tuple[Direction, ...] = ()
    notes: tuple[str, ...] = ()
    tables: Mapping[str, Any] = field(default_factory=dict)
    specifications: tuple[Any, Any] | None = None


def doubts_of(
    study: Study,
    measured: Measured,
    prepared: Prepared,
    columns: tuple[Column, ...],
    lead: int,
    clock: Clock,
) -> Doubts:
    """What would overturn the finding, and how much hangs on the errors."""
    if not study.scrutiny.run or lead < 0:
        return Doubts()
    design = prepared.design
    with clock.stage("scrutiny"):
        names = [
            name
            for name in (*LEFT_OUT, *study.scrutiny.leave_out)
            if name not in design.clusters and name not in design.effects
        ]
        codes, words = grouped_by(_rows_of(prepared), names)
        options = scrutiny_options(study, {**words, **prepared.groups}, codes)
        found = scrutinise(design, columns, lead, options)
        rungs = ladder(design, FitOptions(level=study.level))
    cells = None
    if study.scrutiny.grid.run:
        with clock.stage("specification curve"):
            cells = _specifications(study, measured, prepared, clock)
    return Doubts(
        rungs,
        found.variants,
        found.checks,
        found.directions,
        found.notes,
        found.tables,
        cells,
    )


def _rows_of(prepared: Prepared) -> Any:
    """The deal table in the order of the design's rows."""
    return prepared.deals.set_index("deal_id", drop=False).loc[list(prepared.design.rows)]


def _specifications(
    study: Study, measured: Measured, prepared: Prepared, clock: Clock
) -> tuple[Any, Any]:
    """The specification curve over the study's own windows, models, flags and samples."""
    asked, design = study.scrutiny.grid, prepared.design
    share = study.event_time.share_of_days
    deals = _rows_of(prepared)
    chosen = {
        name: meeting(deals, s.column, s.equals, s.above, s.below, leave_out=s.leave_out, name=name)
        for name, s in asked.samples.items()
    }
    return specifications(
        design,
        outcomes_by_choice(measured.abnormal, measured.windows, share, design.rows)
        or {design.outcome: design.y},
        {**samples_without(measured.ledger, design.rows, FLAGS), **chosen},
        Wanted(
            control_sets=asked.control_sets,
            winsorise=asked.winsorise,
            estimators=asked.estimators,
            fits={
                key: entry(ESTIMATORS, key).load() for key in asked.estimators if key not in LINEAR
            },
            permutations=asked.permutations,
            adjusted_by=asked.adjusted_by,
            most_cells=asked.most_cells,
            allow=asked.allow,
            seed=study.seed,
        ),
        plan.fit_options(study),
        lambda done, total: clock.portion("ways to make the estimate", done, total),
    )
