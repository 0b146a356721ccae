"""Series of one session compounded over the sessions that a share's return covers."""

from __future__ import annotations

import numpy as np

from pipeline.core.prices import Floats, Integers


class Compounded:
    """K series of simple returns on T sessions, ready to be matched with longer returns.

    A return over g sessions, which ends g - 1 sessions without a close, is matched with
    (1 + r_(t-g+1)) ... (1 + r_t) - 1 of every series (Maynes and Rumsey 1993, JBF 17).
    """

    def __init__(self, series: Floats):
        """``series`` is (K, T), decimal; NaN where there is no value."""
        self.series = series
        edge = np.zeros((len(series), 1))
        known = np.isfinite(series)
        self._missing = np.hstack([edge, np.cumsum(~known, axis=1)])
        self._growth = np.hstack([edge + 1, np.cumprod(1 + np.where(known, series, 0.0), axis=1)])

    def over(self, at: Integers, covered: Integers) -> Floats:
        """(K, n, L) values at (n, L) sessions, each over ``covered`` sessions that end there.

        NaN where one of those sessions has no value or lies before the first.
        """
        values = self.series[:, at]
        several = covered > 1
        if several.any():
            last = at[several] + 1
            first = last - covered[several]
            before, first = first < 0, np.maximum(first, 0)
            with np.errstate(divide="ignore", invalid="ignore"):
                moved = self._growth[:, last] / self._growth[:, first] - 1
            gap = self._missing[:, last] > self._missing[:, first]
            values[:, several] = np.where(gap | before, np.nan, moved)
        return values
