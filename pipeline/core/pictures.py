"""The frames behind the pictures of the sample and the page of each deal: what each holds."""

from __future__ import annotations

from collections.abc import Iterable, Mapping

import numpy as np
import pandas as pd

from pipeline.core.tables import typed_frame

PICTURES: Mapping[str, Mapping[str, str]] = {
    "calendar": {"year": "int64", "month": "int64", "deals": "int64"},
    "shared_sessions": {"others": "int64", "deals": "int64", "share_with_more": "float64"},
    "placebo_draws": {
        "draw": "int64",
        "deals": "int64",
        "mean": "float64",
        "test": "str",
        "statistic": "float64",
    },
    "first_stage_bins": {
        "instrument": "str",
        "bin": "int64",
        "deals": "int64",
        "instrument_mean": "float64",
        "treatment_mean": "float64",
        "slope": "float64",
    },
    "propensity": {"deal": "str", "treated": "bool", "probability": "float64"},
    "balance": {"variable": "str", "before": "float64", "after": "float64"},
    "mills": {"deal": "str", "mills": "float64", "predicted": "float64"},
    "deal_stories": {
        "deal": "str",
        "estimation_first": "str",
        "estimation_last": "str",
        "sessions": "int64",
        "observations": "int64",
        "residual_sd": "float64",
        "car": "float64",
        "ci_low": "float64",
        "ci_high": "float64",
        "scar": "float64",
        "rank": "int64",
        "rank_standardised": "int64",
        "traded": "int64",
        "outside": "int64",
        "deals": "int64",
    },
    "deal_standings": {
        "deal": "str",
        "value": "float64",
        "ci_low": "float64",
        "ci_high": "float64",
        "rank": "int64",
        "deals": "int64",
    },
    "deal_days": {
        "deal": "str",
        "day": "int64",
        "date": "str",
        "abnormal_return": "float64",
        "expected": "float64",
        "reach": "float64",
    },
    "deal_fits": {
        "deal": "str",
        "column": "str",
        "observed": "float64",
        "fitted": "float64",
        "residual": "float64",
    },
    "deal_findings": {
        "deal": "str",
        "rule": "str",
        "severity": "str",
        "where": "str",
        "got": "str",
        "remedy": "str",
    },
    "quartiles": {
        "variable": "str",
        "n": "int64",
        "lower": "float64",
        "median": "float64",
        "upper": "float64",
    },
    "picture_facts": {"picture": "str", "name": "str", "value": "float64"},
}
"""Name -> columns. ``share_with_more`` is the share of deals whose window meets more than
``others`` windows; means of bins are of residuals; ``before`` and ``after`` are in pooled standard
deviations. ``reach`` is half the band of one session, ``rank`` 1 for the largest; of two equal ones
both have the better. ``picture_facts`` holds the numbers that titles quote."""

Rows = Iterable[Mapping[str, object]]


def picture_frames(rows: Mapping[str, Rows]) -> dict[str, pd.DataFrame]:
    """The frames of :data:`PICTURES` that have rows, in the order declared there."""
    found = {name: list(rows.get(name, ())) for name in PICTURES}
    return {name: typed_frame(part, PICTURES[name]) for name, part in found.items() if part}


def facts(picture: str, values: Mapping[str, float]) -> list[dict[str, object]]:
    """Rows of ``picture_facts``."""
    return [{"picture": picture, "name": name, "value": value} for name, value in values.items()]


def moved(
    left_out: pd.DataFrame, errors: Mapping[str, float], of: str = "deal"
) -> list[dict[str, object]]:
    """How many of the deals left out in turn move each number, as rows of ``picture_facts``.

    Args:
        left_out: ``target, dimension, group, deals, estimate, change``.
        errors: target -> its standard error, in the unit of ``change``.
        of: the dimension counted.

    Returns:
        For each target ``target: of``, ``beyond`` (those that move it by more than its standard
        error), ``most`` (the largest change) and ``std_error``.
    """
    rows: list[dict[str, object]] = []
    for target, error in errors.items():
        part = left_out[(left_out["target"] == target) & (left_out["dimension"] == of)]
        change = part["change"].to_numpy(dtype=np.float64)
        change = change[np.isfinite(change)]
        if not len(change) or not error > 0:
            continue
        values = {
            "of": float(len(change)),
            "beyond": float((np.abs(change) > error).sum()),
            "most": float(change[np.argmax(np.abs(change))]),
            "std_error": error,
        }
        rows += facts("left_out", {f"{name}: {target}": value for name, value in values.items()})
    return rows
