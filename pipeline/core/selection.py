"""What the review of a selection model found: rows of its tables, and their frames."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, fields
from typing import Any

import pandas as pd

from pipeline.core.tables import no_frame, typed_frame


@dataclass(frozen=True, slots=True)
class FirstStageTerm:
    """One variable of the probit of announcing.

    ``marginal_effect`` is the average change of the probability for ``step`` of the variable,
    NaN for the constant; ``excluded`` says whether the outcome equation lacks the variable.
    """

    term: str
    excluded: bool
    coefficient: float
    std_error: float
    statistic: float
    p_value: float
    marginal_effect: float
    marginal_std_error: float
    step: str


@dataclass(frozen=True, slots=True)
class SelectionCheck:
    """One thing a reviewer asks of a selection model.

    ``verdict`` is ``pass``, ``warn``, ``fail`` or ``reading`` where there is no threshold.
    """

    part: str
    check: str
    value: float
    p_value: float
    threshold: str
    verdict: str
    meaning: str
    source: str


@dataclass(frozen=True, slots=True)
class SelectionVersion:
    """The treatment's coefficient with who announces modelled in one way, decimal.

    ``correction`` is the coefficient of the inverse Mills ratio (ρσ of the likelihood), NaN
    where there is none; ``correction_p`` the p-value of the whole correction; ``reason`` says
    why a version has no number.
    """

    kind: str
    version: str
    estimate: float
    std_error: float
    ci_low: float
    ci_high: float
    n: int
    correction: float
    correction_p: float
    reason: str
    source: str


@dataclass(frozen=True, slots=True)
class LikelihoodPoint:
    """A point of the profile, or the way from one start.

    ``kind`` is ``profile`` or ``start``; a start began at the correlation ``began`` and led to
    ``rho``. ``log_likelihood`` counts from the highest point seen.
    """

    kind: str
    began: float
    rho: float
    log_likelihood: float
    converged: bool
    agrees: bool


@dataclass(frozen=True, slots=True)
class SelectionReview:
    """The review: the first stage, the checklist, the versions, and the likelihood over ρ."""

    first_stage: tuple[FirstStageTerm, ...]
    checks: tuple[SelectionCheck, ...]
    versions: tuple[SelectionVersion, ...]
    likelihood: tuple[LikelihoodPoint, ...]


@dataclass(frozen=True, slots=True)
class GainTerm:
    """One parameter of a model in which investors foresee some of the deals.

    ``unit`` is ``return`` for decimals of the outcome, ``number`` otherwise; ``reason`` says why a
    model has no number; ``note`` what its reader must know.
    """

    model: str
    term: str
    unit: str
    estimate: float
    std_error: float
    p_value: float
    ci_low: float
    ci_high: float
    n: int
    estimand: str
    note: str
    reason: str
    source: str


@dataclass(frozen=True, slots=True)
class BoundsRow:
    """Bounds on the treatment's effect when it may decide which outcomes are seen, decimal.

    ``ci_low`` and ``ci_high`` hold the effect, not the whole range, at the study's level.
    """

    version: str
    lower: float
    upper: float
    ci_low: float
    ci_high: float
    difference: float
    trimmed: float
    trimmed_group: str
    seen_treated: float
    seen_untreated: float
    deals: int
    seen: int
    cells: int
    interval: str
    reason: str


TYPES = {"str": "str", "bool": "bool", "float": "float64", "int": "int64"}


def frame_of(rows: Iterable[Any], kind: type) -> pd.DataFrame:
    """One row a value of the dataclass ``kind``, columns as its fields; nothing without rows."""
    columns: Mapping[str, str] = {field.name: TYPES[str(field.type)] for field in fields(kind)}
    found = [{name: getattr(row, name) for name in columns} for row in rows]
    return typed_frame(found, columns) if found else no_frame()
