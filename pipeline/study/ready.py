"""What a study with an outcome of its own asks of the stages, in the stages' terms."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

from pipeline.core import outcome as core
from pipeline.inputs.ready import OutcomeColumns
from pipeline.study.schema import Study


def outcome(study: Study) -> core.Outcome:
    """What the study explains, for a reader."""
    asked, papers = study.outcome, study.papers
    if asked is None:
        return core.with_decimals(core.ABNORMAL_RETURN, papers.decimals)
    named = outcome_named(asked.model_dump(), study.report.currency, papers.money)
    words = study.labels.get(asked.column, named.words)
    named = core.with_decimals(named, papers.decimals)
    return replace(named, words=words, file=study.inputs.deals.name)


def outcome_named(values: Mapping[str, Any] | None, currency: str, money: str = "") -> core.Outcome:
    """What an [outcome] table with these plain values explains."""
    if values is None:
        return core.ABNORMAL_RETURN
    unit = core.UNITS[values["unit"]]
    return core.Outcome(
        words=values["label"] or values["column"].replace("_", " "),
        unit=core.money_in(currency, money) if unit == core.MONEY else unit,
        column=values["column"],
        error=values["standard_error"],
        base=values["share_of"],
        date=values["date"],
    )


def labels(study: Study) -> dict[str, str]:
    """Words for the columns that [outcome] names."""
    asked = study.outcome
    if asked is None:
        return {}
    dated = {asked.date: "date"} if asked.date else {}
    return {asked.column: outcome(study).words, **dated}


def outcome_columns(study: Study) -> OutcomeColumns | None:
    """The deal list's columns that hold the outcome; None if returns are to be measured."""
    asked = study.outcome
    if asked is None:
        return None
    return OutcomeColumns(
        value=asked.column,
        unit=core.UNITS[asked.unit],
        error=asked.standard_error,
        date=asked.date,
        base=asked.share_of,
        certain=asked.unit_is_certain,
    )


def conventions(study: Study) -> tuple[str, ...]:
    """The conventions a reader must know, one sentence each."""
    asked = study.outcome
    if asked is None:
        return ()
    words = outcome(study).words
    found = [
        f"The {words} of each deal is taken from the column '{asked.column}' of the deal list as "
        f"it stands there, in {asked.unit}; how it was computed is not known here.",
        "A deal without it leaves, with a line in the ledger.",
    ]
    if asked.standard_error:
        found.append(
            f"The column '{asked.standard_error}' holds the standard error with which each was "
            "measured; only a column that says so makes use of it."
        )
    if asked.date:
        found.append(
            f"Deals of one date (column '{asked.date}') are taken to move together, where errors "
            "are clustered and in the interval of the mean."
        )
    return tuple(found)
