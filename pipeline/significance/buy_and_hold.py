"""The mean buy-and-hold return over matched companies, with tests that stand its skewness."""

from __future__ import annotations

from collections.abc import Iterator, Mapping

import numpy as np
import pandas as pd

from pipeline.core.estimate import NotApplicable, Tested
from pipeline.core.prices import Floats
from pipeline.core.tables import typed_frame
from pipeline.core.window import Window
from pipeline.significance.dependence import Dependence
from pipeline.significance.parametric import cross_sectional
from pipeline.significance.resampled import skewness_adjusted
from pipeline.significance.sample import CarSample
from pipeline.significance.windows import mean_interval

COLUMNS = {
    "window_start": "int64",
    "window_end": "int64",
    "deals": "int64",
    "n": "int64",
    "own_return": "float64",
    "control_return": "float64",
    "mean": "float64",
    "median": "float64",
    "ci_low": "float64",
    "ci_high": "float64",
    "statistic": "float64",
    "p_value": "float64",
    "skewness": "float64",
    "skewness_adjusted": "float64",
    "skewness_adjusted_p": "float64",
}


def buy_and_hold(matched: pd.DataFrame, level: float, seed: int) -> pd.DataFrame:
    """One row a window: the mean buy-and-hold abnormal return over the deals with a control.

    Ordinary t (Barber and Lyon 1997, JFE 43: well specified against one matched company) and
    Johnson's skewness-adjusted t with bootstrapped critical values (Lyon, Barber and Tsai 1999,
    JF 54). Both take deals as independent.

    Args:
        matched: window_start, window_end, own_return, control_return, bhar; one row a deal.
        level: of the intervals; ``seed`` of the bootstrap.
    """
    return typed_frame(_rows(matched, level, seed), COLUMNS)


def _rows(matched: pd.DataFrame, level: float, seed: int) -> Iterator[Mapping[str, object]]:
    windows = matched[["window_start", "window_end"]].drop_duplicates()
    for start, end in windows.itertuples(index=False, name=None):
        own = matched[(matched["window_start"] == start) & (matched["window_end"] == end)]
        known = own[own["bhar"].notna()]
        bhar = known["bhar"].to_numpy(np.float64)
        sample = _sample(bhar, Window(start, end), seed)
        low, high = mean_interval(sample, level) if len(bhar) > 1 else (np.nan, np.nan)
        plain, skewed = cross_sectional(sample), skewness_adjusted(sample)
        yield {
            "window_start": start,
            "window_end": end,
            "deals": len(own),
            "n": len(bhar),
            "own_return": known["own_return"].mean(),
            "control_return": known["control_return"].mean(),
            "mean": known["bhar"].mean(),
            "median": known["bhar"].median(),
            "ci_low": low,
            "ci_high": high,
            "statistic": _statistic(plain),
            "p_value": _p(plain),
            "skewness": known["bhar"].skew(),
            "skewness_adjusted": _statistic(skewed),
            "skewness_adjusted_p": _p(skewed),
        }


def _sample(bhar: Floats, window: Window, seed: int) -> CarSample:
    """The deals as a sample without forecast errors: only their own spread is used."""
    n = len(bhar)
    alone = Dependence(np.nan, 0.0, 0, 0.0, np.nan, n, 1)
    unknown = np.full(n, np.nan)
    return CarSample(window, bhar, unknown, unknown, np.zeros(n, np.int64), alone, seed=seed)


def _statistic(test: Tested) -> float:
    return np.nan if isinstance(test, NotApplicable) else test.statistic


def _p(test: Tested) -> float:
    return np.nan if isinstance(test, NotApplicable) else test.p_value
