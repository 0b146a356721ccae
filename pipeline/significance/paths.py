"""The average cumulative path around the announcement, by group, with its band."""

from __future__ import annotations

import numpy as np
import pandas as pd

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.estimate import t_reach
from pipeline.core.window import Window


def average_paths(
    abnormal: AbnormalReturns, groups: pd.Series, days: Window, level: float
) -> pd.DataFrame:
    """Cumulative average abnormal return of each group.

    Args:
        abnormal: the headline model's abnormal returns of N deals.
        groups: (N,) group name of each deal, in the order of ``abnormal``.
        days: the days drawn; the path starts at zero before its first day.
        level: of the pointwise band, t(n - 1) on the cross-sectional standard error of the
            cumulated return.

    Returns:
        ``group, day, n, mean, low, high``, decimal; a deal whose prices stop leaves the
        average from that day on.
    """
    inside = abnormal.returns[:, abnormal.columns(days)]
    cumulative = np.cumsum(inside, axis=1)  # a gap stays a gap: NaN from there on
    rows = []
    names = groups.to_numpy()
    for group in dict.fromkeys(names):
        own = cumulative[names == group]
        n = np.isfinite(own).sum(axis=0)
        for column, day in enumerate(range(days.start, days.end + 1)):
            values = own[np.isfinite(own[:, column]), column]
            if values.size == 0:
                continue
            half = (
                t_reach(level, values.size - 1) * values.std(ddof=1) / np.sqrt(values.size)
                if values.size > 1
                else np.nan
            )
            mean = values.mean()
            rows.append((group, day, int(n[column]), mean, mean - half, mean + half))
    return pd.DataFrame(rows, columns=["group", "day", "n", "mean", "low", "high"])
