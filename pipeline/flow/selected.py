"""The review of who announces, and of outcomes that are not seen."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

from pipeline.characteristics.design import Prepared
from pipeline.characteristics.observed import observed_deals
from pipeline.core.clock import Clock
from pipeline.core.estimate import EstimationFailed
from pipeline.core.results import Results
from pipeline.core.selection import (
    BoundsRow,
    FirstStageTerm,
    GainTerm,
    LikelihoodPoint,
    SelectionCheck,
    SelectionVersion,
    frame_of,
)
from pipeline.estimators.bounds_in_cells import trimming_bounds
from pipeline.estimators.expected_gain import gain_terms
from pipeline.estimators.selection_review import review_selection
from pipeline.flow.measured import Measured
from pipeline.study import plan
from pipeline.study.schema import Study


def selected_of(
    study: Study, measured: Measured, deals: Any, prepared: Prepared, clock: Clock
) -> Mapping[str, Any]:
    """Table -> frame; only what the study asks for. ``deals`` hold the outcome."""
    frames: dict[str, Any] = {}
    with clock.stage("who announces"):
        if study.selection is not None and study.selection.review:
            frames |= _reviewed(study, prepared)
        if study.regression is not None and study.regression.expected_gain:
            terms = gain_terms(prepared.design, plan.fit_options(study))
            frames["expected_gain"] = frame_of(terms, GainTerm)
        if study.bounds is not None:
            frames["bounds"] = frame_of(_bounds(study, measured, deals), BoundsRow)
    return frames


def with_selection(results: Results, frames: Mapping[str, Any]) -> Results:
    """The results with these frames, to read and to save."""
    return replace(results, selection=frames, tables={**results.tables, **frames})


def _reviewed(study: Study, prepared: Prepared) -> dict[str, Any]:
    draws = study.selection.draws if study.selection else 0
    try:
        found = review_selection(prepared.design, plan.fit_options(study), draws)
    except EstimationFailed:
        return {}
    return {
        "selection_first_stage": frame_of(found.first_stage, FirstStageTerm),
        "selection_checks": frame_of(found.checks, SelectionCheck),
        "selection_versions": frame_of(found.versions, SelectionVersion),
        "selection_likelihood": frame_of(found.likelihood, LikelihoodPoint),
    }


def _bounds(study: Study, measured: Measured, deals: Any) -> tuple[BoundsRow, ...]:
    asked, roles = study.bounds, plan.roles(study)
    if asked is None or roles is None:
        return ()
    found = observed_deals(
        measured.tables.deals, deals, plan.recipes(study), roles, asked.observed, asked.cells
    )
    names = tuple(study.labels.get(name, name.replace("_", " ")) for name in asked.cells)
    options = plan.fit_options(study)
    return trimming_bounds(found.design, found.cells, names, options, asked.draws)
