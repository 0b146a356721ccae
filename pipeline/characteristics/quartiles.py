"""Where each characteristic's middle half lies, to set one deal beside the others."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
import pandas as pd


def quartiles_of(deals: pd.DataFrame, names: Iterable[str]) -> list[dict[str, object]]:
    """Rows of ``quartiles`` of the numeric columns among ``names``, gaps left out.

    Quartiles are linear interpolations of the ordered values (Hyndman and Fan 1996, type 7).
    """
    rows: list[dict[str, object]] = []
    for name in dict.fromkeys(names):
        if name not in deals or not pd.api.types.is_numeric_dtype(deals[name]):
            continue
        values = deals[name].to_numpy(dtype=np.float64)
        values = values[np.isfinite(values)]
        if not len(values):
            continue
        lower, median, upper = np.quantile(values, [0.25, 0.5, 0.75])
        rows.append(
            {
                "variable": name,
                "n": len(values),
                "lower": float(lower),
                "median": float(median),
                "upper": float(upper),
            }
        )
    return rows
