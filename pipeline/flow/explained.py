"""From abnormal returns to the columns of the comparison table."""

from __future__ import annotations

from typing import Any

import numpy as np

from pipeline.characteristics.design import Prepared, prepare, price_measures
from pipeline.characteristics.outcomes import with_outcomes
from pipeline.core.estimate import Column, Estimate, EstimationFailed, Withheld
from pipeline.estimators.checks import with_checks
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
from pipeline.study import plan
from pipeline.study.schema import Study

UNSOLVABLE = (
    "its equations have no single solution on these deals: variables that nearly repeat one "
    "another, or too few deals for them, usually do this"
)


def prepared_of(study: Study, measured: Measured) -> Prepared | None:
    """The arrays of the regression, or None without one."""
    roles = plan.roles(study)
    if roles is None:
        return None
    book = plan.recipes(study)
    functions = {key: entry(PRICE_MEASURES, key).load() for key in keys(PRICE_MEASURES)}
    deals = deals_with_outcomes(study, measured)
    candidates = measured.tables.candidates
    if study.outcome is not None:
        return prepare(deals, candidates, book, {}, {}, roles)
    on_candidates = {}
    if candidates is not None:
        candidates = locate_candidates(candidates, measured.panels)
        on_candidates = price_measures(list(book.values()), candidates, measured.panels, functions)
    on_deals = price_measures(list(book.values()), deals, measured.panels, functions)
    return prepare(deals, candidates, book, on_deals, on_candidates, roles)


def deals_with_outcomes(study: Study, measured: Measured) -> Any:
    """The deals with the abnormal returns of each window, or with the outcome they came with."""
    if study.outcome is not None:
        return measured.deals
    time = study.event_time
    lead = measured.abnormal[study.expected_returns.headline]
    log = time.returns == "log"
    return with_outcomes(measured.deals, lead, measured.windows, time.share_of_days, log=log)


def column_of(study: Study, key: str, prepared: Prepared) -> Column:
    """One estimator's column, or the reason there is none."""
    options = plan.fit_options(study)
    try:
        estimate: Estimate = entry(ESTIMATORS, key).load()(prepared.design, options)
    except EstimationFailed as failure:
        return Withheld(key, key.replace("_", " "), failure.reason)
    except np.linalg.LinAlgError:
        return Withheld(key, key.replace("_", " "), UNSOLVABLE)
    return with_checks(estimate)


def lead_of(columns: tuple[Column, ...]) -> int:
    """The column that accounts for most of the choice; -1 if none gave a number that may lead.

    A column that fails a check does not lead.
    """
    ranks = [
        -1
        if isinstance(column, Withheld) or any(check.verdict == "fail" for check in column.checks)
        else entry(ESTIMATORS, column.estimator).answers
        for column in columns
    ]
    return ranks.index(max(ranks)) if ranks and max(ranks) >= 0 else -1
