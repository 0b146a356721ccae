"""The treatment's coefficient without each cluster in turn: how much hangs on one of them."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import EstimationFailed
from pipeline.core.findings import InputProblem
from pipeline.core.prices import Booleans
from pipeline.estimators.instrument_tests import Second
from pipeline.estimators.stages import Parts, parts_of

MOST_GROUPS = 100


def without_each(
    design: Design, options: FitOptions, refit: Callable[[Parts], Second]
) -> dict[str, float]:
    """Lowest and highest coefficient without one cluster, refitted on the other rows.

    Facts without_one_<dimension>_lowest and _highest for each cluster dimension of at most 100
    clusters, and without_one_<dimension>_failed: how many refits gave no number. Young (2022)
    finds that instrumented results often hang on one or two clusters.
    """
    facts: dict[str, float] = {}
    for name, codes in design.clusters.items():
        groups = np.unique(codes)
        if len(groups) > MOST_GROUPS:
            continue
        found = [_coefficient(_rows(design, codes != g), options, refit) for g in groups]
        if not np.isfinite(found).any():
            continue
        facts[f"without_one_{name}_lowest"] = float(np.nanmin(found))
        facts[f"without_one_{name}_highest"] = float(np.nanmax(found))
        facts[f"without_one_{name}_failed"] = float(np.isnan(found).sum())
    return facts


def _coefficient(design: Design, options: FitOptions, refit: Callable[[Parts], Second]) -> float:
    try:
        parts = parts_of(design, options)
        return float(refit(parts).coefficients[parts.at])
    except (InputProblem, EstimationFailed):
        return float("nan")


def _rows(design: Design, stays: Booleans) -> Design:
    variance = design.outcome_variance
    return replace(
        design,
        y=design.y[stays],
        X=design.X[stays],
        Z=design.Z[stays],
        rows=tuple(np.array(design.rows)[stays]),
        effects={name: codes[stays] for name, codes in design.effects.items()},
        clusters={name: codes[stays] for name, codes in design.clusters.items()},
        selection=None,
        outcome_variance=None if variance is None else variance[stays],
    )
