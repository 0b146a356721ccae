"""Fits of events with whole windows: their regressors are those of the session, solved once."""

from __future__ import annotations

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view

from pipeline.core.prices import Booleans, Floats, Integers, PricePanel
from pipeline.core.window import Window
from pipeline.returns.expected import MeanModel
from pipeline.returns.least_squares import ROUNDING, inverses, moments, with_constant

Arrays = dict[str, np.ndarray]
# Windows whose regressors lie farther from their mean over the panel, in root mean squares of
# their movement, are left to the fit that takes each window's own mean off first.
FAR = 10.0
SESSIONS = 256


class SharedFits:
    """Least squares of many events of one panel on the same sessions' regressors.

    Every event of a session has the same regressors X, so (X'X)⁻¹ is made once a session and an
    event costs two products with its own returns, X'y and Xb. The regressors' means over the
    panel are taken off first and X'X is made about each window's own means, so that no digits are
    lost.
    """

    def __init__(self, model: MeanModel, panel: PricePanel, estimation: Window, span: Window):
        """See :class:`~pipeline.returns.fit.Engine`."""
        self.estimation, self.span = estimation, span
        self.sessions, d = model.regressors.shape
        self.constant = int(model.constant)
        slopes = model.regressors[:, self.constant :]
        self.shift = _means(slopes) if self.constant else np.zeros(d)
        near = np.ascontiguousarray(model.regressors.T)
        near[self.constant :] -= self.shift[:, None]
        self.row = np.arange(d) * self.sessions
        length, width = len(estimation), len(span)
        self.regressors = runs(near, length)
        self.returns, self.realised = runs(panel.returns.T, length), runs(panel.returns.T, width)
        self.offset, self.event_offset = runs(model.offset, length), runs(model.offset, width)
        self.has_offset = bool(model.offset.any())
        self.event_days = runs(panel.sessions, width)
        self.event_regressors = runs(model.regressors, width * d)
        self.solved = np.zeros(self.sessions, dtype=np.bool_)
        self.bread = np.empty((self.sessions, d, d))
        self.solver = np.empty((self.sessions, d, d))

    def whole(self, position: Integers) -> Booleans:
        """(n,) whether both windows of an event at ``position`` lie on the panel's sessions."""
        first = position + min(self.estimation.start, self.span.start)
        last = position + max(self.estimation.end, self.span.end)
        enough = len(self.estimation) > len(self.row)
        return np.asarray((first >= 0) & (last < self.sessions) & enough)

    def solve(self, position: Integers) -> None:
        """Make (X'X)⁻¹ of the sessions that do not have it yet."""
        wanted = np.zeros(self.sessions, dtype=np.bool_)
        wanted[position + self.estimation.start] = True
        first = np.flatnonzero(wanted & ~self.solved)
        for at in range(0, len(first), SESSIONS):
            self._solve(first[at : at + SESSIONS])
        self.solved[first] = True

    def _solve(self, first: Integers) -> None:
        x = self.regressors[first[:, None] + self.row].transpose(1, 0, 2)[self.constant :]
        length = x.shape[2]
        if not self.constant:
            self.bread[first] = self.solver[first] = inverses(moments(x), np.zeros(x.shape[1::-1]))
            return
        mean = x.mean(axis=2).T
        products = moments(x - mean.T[:, :, None])
        inverse = inverses(products, ROUNDING * length * (mean + self.shift) ** 2)
        spread = np.einsum("nii->ni", products)
        far = (length * mean**2 > FAR**2 * spread).any(axis=1)
        inverse[far] = np.nan
        total = np.full(len(first), float(length))
        self.bread[first] = with_constant(inverse, mean + self.shift, total)
        self.solver[first] = with_constant(inverse, mean, total)

    def fit(self, column: Integers, position: Integers) -> Arrays:
        """Arrays of :class:`~pipeline.core.abnormal.AbnormalReturns` of n whole events.

        The residual variance is NaN where a return is missing or the regressors allow no fit.
        """
        first = position + self.estimation.start
        y = self.returns[column * self.sessions + first]
        if self.has_offset:
            y -= self.offset[first]
        x = self.regressors[first[:, None] + self.row]
        products = np.matmul(x, y[:, :, None])
        parameters = np.matmul(self.solver[first], products)[..., 0]
        y -= np.matmul(parameters[:, None, :], x)[:, 0]
        free = y.shape[1] - len(self.row)
        if self.constant:
            parameters[:, 0] -= parameters[:, 1:] @ self.shift
        return {
            **self._event(column, position, parameters),
            "parameters": parameters,
            "bread": self.bread[first],
            "residual_variance": np.vecdot(y, y) / free,
            "observations": np.full(len(y), y.shape[1]),
            "estimation_returns": y,
        }

    def _event(self, column: Integers, position: Integers, parameters: Floats) -> Arrays:
        at = position + self.span.start
        d = len(self.row)
        regressors = self.event_regressors[at * d].reshape(len(at), len(self.span), d)
        expected = np.matmul(regressors, parameters[:, :, None])[..., 0]
        if self.has_offset:
            expected += self.event_offset[at]
        return {
            "returns": self.realised[column * self.sessions + at] - expected,
            "expected": expected,
            "regressors": regressors,
            "days": self.event_days[at],
        }


def runs(values: np.ndarray, length: int) -> np.ndarray:
    """(m, length) every run of neighbours of the flattened values, looked at in place."""
    flat = values.reshape(-1)
    if len(flat) < length:
        return np.empty((0, length), dtype=values.dtype)
    return sliding_window_view(flat, length)


def _means(columns: Floats) -> Floats:
    """(k,) means of the values there are; zero for a column without one."""
    known = np.isfinite(columns)
    total = np.where(known, columns, 0.0).sum(axis=0)
    return np.asarray(total / np.maximum(known.sum(axis=0), 1))
