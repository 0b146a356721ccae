"""The results of a run, with every table that is saved."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

from pipeline.characteristics.design import Prepared
from pipeline.characteristics.outcomes import (
    deals_frame,
    group_names,
)
from pipeline.core.estimate import Column, Withheld
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
from pipeline.flow.explained import Doubts, deals_with_outcomes, lead_of
from pipeline.flow.measured import Measured
from pipeline.report.headline import headline_frame
from pipeline.significance.averages import averages_of, groups_of
from pipeline.significance.checks import sample_checks
from pipeline.significance.choice import leading_test
from pipeline.significance.paths import average_paths
from pipeline.significance.power import power_of
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
    leading = leading_test(study.tests.headline, len(measured.deals))
    facts = plan.facts(study, leading, measured.windows)
    lead_model = study.expected_returns.headline
    lead = measured.abnormal[lead_model]
    deals = prepared.deals if prepared else deals_with_outcomes(study, measured)
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
        lead=lead_of(columns),
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
