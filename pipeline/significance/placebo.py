"""What the tests do on dates without an announcement: their size in the analyst's own sample."""

from __future__ import annotations

from collections.abc import Iterable, Mapping

import numpy as np
import pandas as pd

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.estimate import TestResult
from pipeline.core.prices import Integers
from pipeline.core.tables import typed_frame
from pipeline.core.window import Window
from pipeline.significance.dependence import Known
from pipeline.significance.sample import car_sample
from pipeline.significance.windows import TestFunction

COLUMNS = {
    "test": "str",
    "title": "str",
    "rejected": "int64",
    "draws": "int64",
    "rate": "float64",
    "std_error": "float64",
    "nominal": "float64",
}
MEAN = "mean"
ROUNDING = 1e-12


def placebo_sizes(
    samples: Iterable[tuple[Integers, AbnormalReturns]],
    window: Window,
    tests: Mapping[str, TestFunction],
    known: Known,
    mean: float,
    size: float,
) -> pd.DataFrame:
    """How often each test rejects a true null at ``size``, with its Monte-Carlo standard error.

    Args:
        samples: pseudo-samples of deals, none of them announced: the rows of the deals among
            those of ``known``, and their abnormal returns.
        window: the headline window.
        tests: key -> test.
        known: the links among all deals, measured once on the deals themselves: which companies
            move together is not drawn again.
        mean: the sample's own mean CAR, decimal.
        size: nominal level.

    Returns:
        One row a test, and the row ``mean``: the share of draws whose mean is at least as far from
        zero as the sample's own, which is an empirical p-value (Brown and Warner 1985, JFE 14).
    """
    found: dict[str, list[bool]] = {}
    titles: dict[str, str] = {}
    far: list[bool] = []
    for rows_of, abnormal in samples:
        sample = car_sample(abnormal, window, 1.0, known.take(rows_of))
        if sample.n < 2:
            continue
        far.append(abs(float(sample.car.mean())) >= abs(mean) * (1 - ROUNDING))
        for key, test in tests.items():
            result = test(sample)
            if isinstance(result, TestResult):
                found.setdefault(key, []).append(result.p_value < size)
                titles[key] = result.name
    rows = [_row(key, titles[key], np.array(hits), size) for key, hits in found.items()]
    if far:
        draws = len(far)
        p = (1 + sum(far)) / (draws + 1)
        row = _row(MEAN, "Mean as far from zero as the sample's", np.array(far), size)
        rows.append({**row, "rate": p, "std_error": float(np.sqrt(p * (1 - p) / draws))})
    return typed_frame(rows, COLUMNS)


def _row(key: str, title: str, hits: np.ndarray, size: float) -> dict[str, object]:
    rate = float(hits.mean())
    return {
        "test": key,
        "title": title,
        "rejected": int(hits.sum()),
        "draws": len(hits),
        "rate": rate,
        "std_error": float(np.sqrt(rate * (1 - rate) / len(hits))),
        "nominal": size,
    }
