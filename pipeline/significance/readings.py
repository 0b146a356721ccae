"""The headline mean and the test that leads, once more with another date or listing."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
import pandas as pd

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.estimate import Tested, TestResult
from pipeline.core.reading import Reading
from pipeline.core.tables import typed_frame
from pipeline.core.window import Window
from pipeline.significance.sample import CarSample, car_sample
from pipeline.significance.windows import mean_interval

AS_DECLARED = "as in the headline"
COLUMNS = {
    "reading": "str",
    "changed": "int64",
    "n": "int64",
    "mean": "float64",
    "ci_low": "float64",
    "ci_high": "float64",
    "test": "str",
    "statistic": "float64",
    "p_value": "float64",
    "reason": "str",
}


def readings_frame(
    lead: AbnormalReturns,
    readings: Sequence[Reading],
    window: Window,
    test: Callable[[CarSample], Tested],
    level: float,
    seed: int,
) -> pd.DataFrame:
    """The headline and each other reading of the same deals.

    Args:
        lead: abnormal returns of the headline.
        readings: the same with one choice made differently.
        window: the headline window, which needs all its days.
        test: the test that leads.
        level: of the interval.
        seed: of tests that resample.

    Returns:
        ``reading, changed, n, mean, ci_low, ci_high, test, statistic, p_value, reason``, decimal,
        the headline first; no row without a reading. ``changed`` counts the deals for which the
        choice makes a difference.
    """
    if not readings:
        return typed_frame([], COLUMNS)
    told = [(AS_DECLARED, 0, lead), *((r.words, r.changed, r.abnormal) for r in readings)]
    rows = [_row(*item, window, test, level, seed) for item in told]
    return typed_frame(rows, COLUMNS)


def _row(
    words: str,
    changed: int,
    abnormal: AbnormalReturns,
    window: Window,
    test: Callable[[CarSample], Tested],
    level: float,
    seed: int,
) -> dict[str, object]:
    sample = car_sample(abnormal, window, 1.0, seed=seed)
    low, high = mean_interval(sample, level)
    result = test(sample)
    made = isinstance(result, TestResult)
    return {
        "reading": words,
        "changed": changed,
        "n": sample.n,
        "mean": float(sample.car.mean()) if sample.n else np.nan,
        "ci_low": low,
        "ci_high": high,
        "test": result.name,
        "statistic": result.statistic if isinstance(result, TestResult) else np.nan,
        "p_value": result.p_value if isinstance(result, TestResult) else np.nan,
        "reason": "" if made else getattr(result, "reason", ""),
    }
