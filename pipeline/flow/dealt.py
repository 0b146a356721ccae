"""The frames behind the page of each deal, asked of the stages that make them."""

from __future__ import annotations

from collections.abc import Container
from dataclasses import replace
from typing import Any

from pipeline.characteristics.design import Prepared
from pipeline.characteristics.quartiles import quartiles_of
from pipeline.core.findings import touching
from pipeline.core.pictures import picture_frames
from pipeline.core.results import Results
from pipeline.estimators.selection import LAMBDA
from pipeline.flow.measured import Measured
from pipeline.flow.ready import standings_of
from pipeline.scrutiny.fitted import fits_of
from pipeline.significance.story import days_of, stories_of
from pipeline.study.schema import Study


def with_deal_frames(
    results: Results, study: Study, measured: Measured, prepared: Prepared | None, deal: str = ""
) -> Results:
    """The results with what the pages are made from: of ``deal``, else of as many as asked for."""
    facts, rows, tables = results.study, dict[str, Any](), dict(results.tables)
    every = measured.deals["deal_id"].astype(str)
    shown = frozenset([deal] if deal else every[: facts.deal_pages])
    if not shown:
        return results
    names = (facts.outcome.base, *facts.regressors, *facts.instruments)
    rows["quartiles"] = quartiles_of(results.deals, names)
    rows["deal_findings"] = _findings(study, measured, results, shown)
    if prepared is not None:
        mills = tables.get("mills")
        further = {} if mills is None else {LAMBDA: mills["mills"].to_numpy()}
        rows["deal_fits"] = fits_of(prepared.design, results.columns, further, shown)
    if study.outcome is None:
        lead = measured.abnormal[study.expected_returns.headline]
        tables["deal_days"] = days_of(lead, study.level, shown)
        stories = stories_of(lead, facts.headline, study.level, tables["deal_days"])
        rows["deal_stories"] = stories
    else:
        rows["deal_standings"] = standings_of(study, measured.deals, shown)
    return replace(results, tables={**tables, **picture_frames(rows)})


def _findings(
    study: Study, measured: Measured, results: Results, shown: Container[str]
) -> list[dict[str, object]]:
    if "_row" not in measured.deals:
        return []
    places = zip(measured.deals["deal_id"], measured.deals["_row"].astype(int), strict=True)
    rows = {str(deal): row for deal, row in places if deal in shown}
    files = ("deals", study.inputs.deals.name)
    return [
        {
            "deal": deal,
            "rule": item.rule,
            "severity": str(item.severity),
            "where": item.where,
            "got": item.got,
            "remedy": item.remedy,
        }
        for deal, item in touching(results.findings, rows, files)
    ]
