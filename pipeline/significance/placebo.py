"""What the tests do on dates without an announcement: their size in the analyst's own sample."""

from __future__ import annotations

from collections.abc import Iterable, Mapping

import numpy as np
import pandas as pd

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.estimate import Tested, TestResult
from pipeline.core.pictures import PICTURES, facts
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
DRAWN = PICTURES["placebo_draws"]
ROUNDING = 1e-12


def placebo_sizes(
    samples: Iterable[tuple[Integers, AbnormalReturns]],
    window: Window,
    tests: Mapping[str, TestFunction],
    known: Known,
    mean: float,
    size: float,
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """How often each test rejects a true null at ``size``, with its Monte-Carlo standard error.

    Args:
        samples: pseudo-samples of deals, none of them announced: the rows of the deals among
            those of ``known``, and their abnormal returns.
        window: the headline window.
        tests: key -> test, the one that leads first.
        known: the links among all deals, measured once on the deals themselves: which companies
            move together is not drawn again.
        mean: the sample's own mean CAR, decimal.
        size: nominal level.

    Returns:
        One row a test, and the row ``mean``: the share of draws whose mean is at least as far from
        zero as the sample's own, which is an empirical p-value (Brown and Warner 1985, JFE 14).
        And one row a draw: its deals, its mean and the statistic of the test that leads, NaN
        where it gave none.
    """
    found: dict[str, list[bool]] = {}
    titles: dict[str, str] = {}
    far: list[bool] = []
    drawn: list[dict[str, object]] = []
    for rows_of, abnormal in samples:
        sample = car_sample(abnormal, window, 1.0, known.take(rows_of))
        if sample.n < 2:
            continue
        middle = float(sample.car.mean())
        far.append(abs(middle) >= abs(mean) * (1 - ROUNDING))
        row = {"draw": len(far), "deals": sample.n, "mean": middle, "statistic": float("nan")}
        drawn.append({**row, "test": next(iter(tests), "")})
        for key, test in tests.items():
            result = test(sample)
            if isinstance(result, TestResult):
                if key == drawn[-1]["test"]:
                    drawn[-1]["statistic"] = result.statistic
                found.setdefault(key, []).append(result.p_value < size)
                titles[key] = result.name
    rows = [_row(key, titles[key], np.array(hits), size) for key, hits in found.items()]
    if far:
        draws = len(far)
        p = (1 + sum(far)) / (draws + 1)
        mean_row = _row(MEAN, "Mean as far from zero as the sample's", np.array(far), size)
        rows.append({**mean_row, "rate": p, "std_error": float(np.sqrt(p * (1 - p) / draws))})
    return typed_frame(rows, COLUMNS), typed_frame(drawn, DRAWN)


def farther(draws: pd.DataFrame, own: Tested | None) -> list[dict[str, object]]:
    """How many draws' statistics are at least as far from zero as the sample's own.

    Rows of ``picture_facts``: ``draws`` that gave a statistic and ``farther``; none without one.
    """
    drawn = draws["statistic"].to_numpy(dtype=np.float64)
    drawn = np.abs(drawn[np.isfinite(drawn)])
    if not len(drawn) or not isinstance(own, TestResult) or not np.isfinite(own.statistic):
        return []
    beyond = float((drawn >= abs(own.statistic) * (1 - ROUNDING)).sum())
    return facts("placebo", {"draws": float(len(drawn)), "farther": beyond})


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
