"""The results of a run, with every table that is saved."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import pandas as pd

from pipeline.characteristics.design import Prepared
from pipeline.characteristics.outcomes import (
    deals_frame,
    group_names,
)
from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.estimate import Column, Diagnostic, Withheld
from pipeline.core.findings import findings_frame
from pipeline.core.results import Results
from pipeline.core.scrutiny import direction_frame, together
from pipeline.core.tables import (
    abnormal_returns_frame,
    diagnostics_frame,
    estimates_frame,
    event_tests_frame,
    ladder_frame,
    no_frame,
)
from pipeline.core.window import Window
from pipeline.flow.doubted import Doubts
from pipeline.flow.explained import deals_with_outcomes, lead_of
from pipeline.flow.horizons import longer_horizons
from pipeline.flow.measured import Measured
from pipeline.flow.ready import summary_of
from pipeline.registry import TESTS, entry
from pipeline.report.headline import headline_frame
from pipeline.significance.averages import averages_of, groups_of
from pipeline.significance.checks import sample_checks
from pipeline.significance.choice import leading_test
from pipeline.significance.paths import average_paths
from pipeline.significance.power import power_of
from pipeline.significance.readings import readings_frame
from pipeline.significance.several_windows import several_windows
from pipeline.significance.variants import mean_variants
from pipeline.study import plan
from pipeline.study.schema import Study


def results_of(
    study: Study,
    measured: Measured,
    found: Any,
    prepared: Prepared | None,
    columns: tuple[Column, ...],
    placebo: Any,
    doubts: Doubts,
) -> Results:
    """Everything a document or a table is made from."""
    ready = study.outcome is not None
    leading = "" if ready else leading_test(study.tests.headline, len(measured.deals))
    facts = plan.facts(study, leading, measured.windows)
    deals = prepared.deals if prepared else deals_with_outcomes(study, measured)
    groups = group_names(deals, facts.treatment, facts.groups)
    lead = None if ready else measured.abnormal[study.expected_returns.headline]
    longer = longer_horizons(study, measured)
    ledger = measured.ledger.then(*longer.stages, *((prepared.ledger,) if prepared else ()))
    mean = None
    if lead:
        mean = mean_variants(
            measured.abnormal, facts.headline, ledger, study.level, measured.readings
        )
    results = Results(
        study=facts,
        abnormal=measured.abnormal,
        digests=measured.tables.digests,
        deals=deals_frame(deals, groups),
        window_tests=found,
        columns=columns,
        lead=lead_of(columns),
        paths=no_frame(),
        diagnostics=diagnostics_frame(_checks(lead, facts.headline, deals, columns, doubts)),
        sensitivity=together(mean, doubts.variants),
        ledger=ledger,
        findings=measured.findings + (prepared.findings if prepared else ()),
        tables={},
        summary=summary_of(study, deals, groups, facts),
        calendar_time=longer.calendar_time,
        matched=longer.matched,
        buy_and_hold=longer.buy_and_hold,
        ladder=ladder_frame(doubts.rungs),
        directions=direction_frame(doubts.directions),
        doubts=doubts.notes,
        specifications=doubts.specifications[0] if doubts.specifications else no_frame(),
        curve=doubts.specifications[1] if doubts.specifications else no_frame(),
        look=_in_a_notebook,
    )
    if lead:
        results = _with_reaction(results, study, measured, lead, groups, deals, placebo)
    tables = {**_tables(results), **doubts.tables, "headline": headline_frame(results)}
    return replace(results, tables=tables)


def _checks(
    lead: AbnormalReturns | None,
    headline: Window,
    deals: pd.DataFrame,
    columns: tuple[Column, ...],
    doubts: Doubts,
) -> tuple[Diagnostic, ...]:
    """Those of the sample, of every column, and of what was doubted, in that order."""
    of_sample = sample_checks(lead, headline, deals) if lead else ()
    fitted = (column for column in columns if not isinstance(column, Withheld))
    return (*of_sample, *(check for column in fitted for check in column.checks), *doubts.checks)


def _in_a_notebook(results: Results) -> str:
    from pipeline.report.html import fragment

    return fragment(results)


def _with_reaction(
    results: Results,
    study: Study,
    measured: Measured,
    lead: AbnormalReturns,
    groups: Any,
    deals: Any,
    placebo: Any,
) -> Results:
    """What only returns measured from prices can tell."""
    facts = results.study
    return replace(
        results,
        paths=average_paths(lead, groups, plan.path_days(study), study.level, study.seed),
        averages=averages_of(
            lead, facts.headline, deals, study.level, log=study.event_time.returns == "log"
        ),
        groups=groups_of(lead, facts.headline, groups, facts.groups),
        placebo=placebo,
        power=power_of(lead, facts.headline),
        several_windows=several_windows(
            measured.abnormal, measured.windows, study.event_time.share_of_days, study.seed
        ),
        readings=readings_frame(
            lead,
            measured.readings,
            facts.headline,
            entry(TESTS, facts.headline_test).load(),
            study.level,
            study.seed,
        ),
    )


def _tables(results: Results) -> dict[str, Any]:
    """Every table that is saved, but what the doubts add and the headline."""
    saved = {
        "deals": results.deals,
        "estimates": estimates_frame(results.columns, results.study.explained),
        "diagnostics": results.diagnostics,
        "sensitivity": results.sensitivity,
        "ledger": results.ledger.frame(),
        "findings": findings_frame(results.findings),
        "ladder": results.ladder,
        "directions": results.directions,
        "specifications": results.specifications,
        "curve": results.curve,
    }
    if not results.abnormal:
        return {**saved, "summary": results.summary}
    return {
        **saved,
        "abnormal_returns": abnormal_returns_frame(results.abnormal),
        "event_tests": event_tests_frame(results.window_tests),
        "paths": results.paths,
        "placebo": results.placebo,
        "power": results.power,
        "averages": results.averages,
        "groups": results.groups,
        "several_windows": results.several_windows,
        "calendar_time": results.calendar_time,
        "matched": results.matched,
        "buy_and_hold": results.buy_and_hold,
        "readings": results.readings,
    }
