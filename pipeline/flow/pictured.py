"""The frames behind the pictures of the sample, asked of the stages that make them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

from pipeline.characteristics.design import Prepared
from pipeline.core.estimate import Estimate
from pipeline.core.pictures import moved, picture_frames
from pipeline.core.results import Results
from pipeline.core.scrutiny import LEFT_OUT, with_rows
from pipeline.flow.measured import Measured
from pipeline.report.headline import MEAN_REACTION
from pipeline.scrutiny.pictured import pictured
from pipeline.significance.calendar import (
    calendar_facts,
    calendar_of,
    means_left_out,
    sharing_of,
)
from pipeline.significance.placebo import farther
from pipeline.study import plan
from pipeline.study.plan_scrutiny import OWN_WORDS
from pipeline.study.schema import Study


def with_pictures(
    results: Results, study: Study, measured: Measured, prepared: Prepared | None, draws: Any
) -> Results:
    """The results with the frames of the pictures, and the deals left out of the mean as well."""
    rows: dict[str, list[Any]] = {"picture_facts": []}
    if prepared is not None and study.scrutiny.run:
        rows |= pictured(prepared.design, plan.fit_options(study))
    tables = dict(results.tables)
    left_out = tables.get(LEFT_OUT)
    errors = _errors(results)
    if study.outcome is None:
        found, error = _of_the_mean(study, measured, rows)
        left_out = with_rows(LEFT_OUT, found, left_out)
        errors = {**error, **errors}
    if left_out is not None:
        tables[LEFT_OUT] = left_out
        rows["picture_facts"] += moved(left_out, errors)
    if len(draws):
        own = results.headline.tests.get(str(draws["test"].iloc[0]))
        rows["placebo_draws"] = draws.to_dict("records")
        rows["picture_facts"] += farther(draws, own)
    tables |= picture_frames(rows)
    return replace(results, tables=tables)


def _of_the_mean(
    study: Study, measured: Measured, rows: dict[str, list[Any]]
) -> tuple[list[Any], dict[str, float]]:
    """The mean without each deal; fills in the calendar."""
    lead, window = measured.abnormal[study.expected_returns.headline], study.event_time
    deals = measured.deals
    rows["calendar"] = calendar_of(deals["day_zero"])
    rows["shared_sessions"] = sharing_of(lead, window.headline_window)
    rows["picture_facts"] += calendar_facts(rows["calendar"], rows["shared_sessions"])
    groups = {word: deals[name].astype(str) for name, word in OWN_WORDS.items() if name in deals}
    return means_left_out(lead, window.headline_window, MEAN_REACTION, groups)


def _errors(results: Results) -> Mapping[str, float]:
    """Target of the deals left out -> the standard error of the number as reported."""
    reported = results.tables.get("reported")
    if reported is None:
        return {}
    by_title = {
        column.title: float(column.term(column.treatment)["std_error"])
        for column in results.columns
        if isinstance(column, Estimate) and column.treatment in column.names
    }
    pairs = zip(reported["target"], reported["title"], strict=True)
    return {str(target): by_title[str(title)] for target, title in pairs if title in by_title}
