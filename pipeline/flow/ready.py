"""A study whose deal list holds the outcome: no returns are measured, no tests are made."""

from __future__ import annotations

from collections.abc import Container
from typing import Any

import numpy as np
import pandas as pd

from pipeline.characteristics.universe import codes
from pipeline.core.clock import Clock
from pipeline.core.findings import problem
from pipeline.core.ledger import Ledger
from pipeline.core.outcome import Standing, standing_of
from pipeline.core.results import StudyFacts
from pipeline.core.tables import SUMMARY_COLUMNS, typed_frame
from pipeline.estimators.average import average
from pipeline.flow.measured import Measured
from pipeline.flow.seen import unchanged
from pipeline.inputs.read import Tables
from pipeline.inputs.ready import read_ready
from pipeline.study import plan, plan_events, ready
from pipeline.study.schema import Study

ALL = "all deals"


def ready_deals(study: Study, clock: Clock) -> Measured:
    """The deals that have an outcome, in the place of measured ones.

    Raises:
        InputProblem: with every finding of the tables, or ``missing_outcome`` if no deal has one.
    """
    columns = ready.outcome_columns(study)
    assert columns is not None
    with clock.stage("inputs"), unchanged(study) as before:
        read = read_ready(
            plan.sources(study),
            plan.wanted(study),
            columns,
            date_format=study.inputs.date_format,
            rules=plan_events.deal_rules(study),
        )
    if read.deals.empty:
        raise problem(
            "missing_outcome",
            study.inputs.deals.name,
            column=columns.value,
            got="no deal with an outcome",
            expected="a number in at least one row",
            remedy="Fill the column, or name another one in outcome.column.",
        )
    none = pd.DataFrame()
    tables = Tables(
        deals=read.listed,
        ledger=read.ledger[0],
        prices=none,
        benchmarks=none,
        candidates=read.candidates,
        factors=None,
        findings=read.findings,
        digests={**read.digests, **before.digests},
    )
    return Measured(read.deals, {}, {}, Ledger(read.ledger), read.findings, tables, ())


def ready_standing(study: Study, deals: Any, name: str) -> Standing | None:
    """Where one deal's outcome lies among the others; None if it has none."""
    outcome = ready.outcome(study)
    values = deals[outcome.column].to_numpy(np.float64)
    rows = np.flatnonzero((deals["deal_id"] == name).to_numpy())
    if not rows.size:
        return None
    errors = f"{outcome.column}_std_dev"
    error = float(deals[errors].iloc[rows[0]]) if errors in deals else float("nan")
    return standing_of(outcome, float(values[rows[0]]), error, values, study.level)


def standings_of(study: Study, deals: Any, shown: Container[str]) -> list[dict[str, Any]]:
    """Where the outcomes ``shown`` lie among all of them, as rows of ``deal_standings``."""
    names = [str(name) for name in deals["deal_id"] if name in shown]
    found = {name: ready_standing(study, deals, name) for name in names}
    return [
        {
            "deal": name,
            "value": one.value,
            "ci_low": one.low,
            "ci_high": one.high,
            "rank": one.rank,
            "deals": one.deals,
        }
        for name, one in found.items()
        if one is not None
    ]


def summary_of(study: Study, deals: Any, groups: Any, facts: StudyFacts) -> pd.DataFrame:
    """The outcome of all deals and of each group; empty where returns were measured.

    ``group, n, mean, median, std_dev, share_positive, std_error, df, ci_low, ci_high, clusters``,
    amounts as stored.
    """
    outcome = facts.outcome
    if not outcome.ready:
        return typed_frame([], SUMMARY_COLUMNS)
    parts = {ALL: np.ones(len(deals), dtype=np.bool_)}
    parts |= {word: (groups == word).to_numpy() for word in facts.groups if (groups == word).any()}
    rows = [
        _summary(group, deals[rows], outcome.column, outcome.date, study.level)
        for group, rows in parts.items()
    ]
    return typed_frame(rows, SUMMARY_COLUMNS)


def _summary(group: str, deals: Any, column: str, date: str, level: float) -> dict[str, Any]:
    values = deals[column].to_numpy(np.float64)
    dated = bool(date) and bool((deals[date] != "").all())
    found = average(values, codes(deals[date]) if dated else None, level)
    return {
        "group": group,
        "n": len(values),
        "mean": found.mean,
        "median": float(np.median(values)),
        "std_dev": float(np.std(values, ddof=1)) if len(values) > 1 else float("nan"),
        "share_positive": float((values > 0).mean()),
        "std_error": found.std_error,
        "df": found.df,
        "ci_low": found.low,
        "ci_high": found.high,
        "clusters": found.clusters,
    }
