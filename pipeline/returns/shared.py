"""Fits of events whose windows lie on the panel: they share the regressors of their session."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view

from pipeline.core.prices import Booleans, Floats, Integers, PricePanel
from pipeline.core.window import Window
from pipeline.returns.expected import MeanModel
from pipeline.returns.least_squares import ROUNDING, inverses, with_constant

Arrays = dict[str, np.ndarray]
# Windows whose regressors lie farther from their mean over the panel, in root mean squares of
# their movement, are left to the fit that takes each window's own mean off first.
FAR = 10.0
SESSIONS = 256


class SharedFits:
    """Least squares of many events of one panel on the same sessions' regressors.

    Every event of a session has the same regressors X, so (X'X)⁻¹ is made once a session and an
    event costs two products with its own returns, X'y and Xb. An event that lacks some returns
    has an (X'X)⁻¹ of its own, from the sessions it uses. The regressors' means over the panel are
    taken off first, and X'X is turned into moments about the window's own means before it is
    inverted, so that no digits are lost.
    """

    def __init__(self, model: MeanModel, panel: PricePanel, estimation: Window, span: Window):
        """See :class:`~pipeline.returns.fit.Engine`."""
        self.estimation, self.span = estimation, span
        self.sessions, d = model.regressors.shape
        self.constant = int(model.constant)
        slopes = model.regressors[:, self.constant :]
        self.shift = _means(slopes) if self.constant else np.zeros(d)
        known = np.isfinite(model.regressors).all(axis=1) & np.isfinite(model.offset)
        near = np.where(known, model.regressors.T, 0.0)
        near[self.constant :, known] -= self.shift[:, None]
        self.row = np.arange(d) * self.sessions
        length, width = len(estimation), len(span)
        self.known = runs(known, length)
        self.regressors = runs(near, length)
        self.returns, self.realised = runs(panel.returns.T, length), runs(panel.returns.T, width)
        self.offset, self.event_offset = runs(model.offset, length), runs(model.offset, width)
        self.has_offset = bool(model.offset.any())
        self.event_days = runs(panel.sessions, width)
        self.event_regressors = runs(model.regressors, width * d)
        self.solved = np.zeros(self.sessions, dtype=np.bool_)
        self.bread = np.empty((self.sessions, d, d))
        self.solver = np.empty((self.sessions, d, d))

    def inside(self, position: Integers) -> Booleans:
        """(n,) whether both windows of an event at ``position`` lie on the panel's sessions."""
        first = position + min(self.estimation.start, self.span.start)
        last = position + max(self.estimation.end, self.span.end)
        return np.asarray((first >= 0) & (last < self.sessions))

    def fit(
        self, column: Integers, position: Integers, masked: Booleans
    ) -> Iterator[tuple[Integers, Arrays]]:
        """Arrays of :class:`~pipeline.core.abnormal.AbnormalReturns` of n events inside the panel.

        The residual variance is NaN where the returns or the regressors allow no fit.

        Args:
            column, position: (n,) of the events.
            masked: (n, E) estimation sessions not to use.

        Returns:
            Rows of the n and their arrays, first those with every return, then the others.
        """
        first = position + self.estimation.start
        y = self.returns[column * self.sessions + first]
        if self.has_offset:
            y -= self.offset[first]
        enough = y.shape[1] > len(self.row)
        whole = np.isfinite(y @ np.ones(y.shape[1])) & ~masked.any(axis=1) & enough
        if whole.all():
            yield np.arange(len(y)), self._whole(y, column, position)
            return
        rows, others = np.flatnonzero(whole), np.flatnonzero(~whole)
        if len(rows):
            yield rows, self._whole(y[rows], column[rows], position[rows])
        yield others, self._with_gaps(y[others], column[others], position[others], masked[others])

    def _whole(self, y: Floats, column: Integers, position: Integers) -> Arrays:
        """Arrays of events with every return."""
        first = position + self.estimation.start
        self._solve(first)
        x = self.regressors[first[:, None] + self.row]
        products = np.matmul(x, y[:, :, None])
        parameters = np.matmul(self.solver[first], products)[..., 0]
        y -= np.matmul(parameters[:, None, :], x)[:, 0]
        observations = np.full(len(y), y.shape[1])
        found = self._event(column, position, parameters)
        return {**found, **self._estimated(self.bread[first], y, observations)}

    def _with_gaps(
        self, y: Floats, column: Integers, position: Integers, masked: Booleans
    ) -> Arrays:
        """Arrays of events that do not use every session."""
        first = position + self.estimation.start
        used = np.isfinite(y) & self.known[first] & ~masked
        y = np.where(used, y, 0.0)
        x = self.regressors[first[:, None] + self.row]
        x *= used[:, None, :]
        bread, solver = self._inverted(np.matmul(x, x.transpose(0, 2, 1)))
        parameters = np.matmul(solver, np.matmul(x, y[:, :, None]))[..., 0]
        y -= np.matmul(parameters[:, None, :], x)[:, 0]
        found = {
            **self._event(column, position, parameters),
            **self._estimated(bread, y, used.sum(axis=1)),
        }
        y[~used] = np.nan
        return found

    def _estimated(self, bread: Floats, residuals: Floats, observations: Integers) -> Arrays:
        free = observations - len(self.row)
        squares = np.vecdot(residuals, residuals)
        with np.errstate(divide="ignore", invalid="ignore"):
            variance = np.where(free > 0, squares / free, np.nan)
        return {
            "bread": bread,
            "residual_variance": variance,
            "observations": observations,
            "estimation_returns": residuals,
        }

    def _solve(self, first: Integers) -> None:
        """Make (X'X)⁻¹ of the windows from ``first`` on that do not have it yet."""
        wanted = np.zeros(self.sessions, dtype=np.bool_)
        wanted[first] = True
        new = np.flatnonzero(wanted & ~self.solved)
        for at in range(0, len(new), SESSIONS):
            part = new[at : at + SESSIONS]
            x = self.regressors[part[:, None] + self.row]
            bread, solver = self._inverted(np.matmul(x, x.transpose(0, 2, 1)))
            unknown = ~self.known[part].all(axis=1)
            bread[unknown] = solver[unknown] = np.nan
            self.bread[part], self.solver[part] = bread, solver
        self.solved[new] = True

    def _inverted(self, products: Floats) -> tuple[Floats, Floats]:
        """(n, d, d) inverses of X'X and of the products of the regressors as they are kept.

        ``products`` (n, d, d) are those of the regressors less their means over the panel.
        """
        if not self.constant:
            inverse = inverses(products, np.zeros(products.shape[:2]))
            return inverse, inverse.copy()
        total = np.where(products[:, 0, 0] > 0, products[:, 0, 0], np.nan)
        mean = products[:, 0, 1:] / total[:, None]
        apart = total[:, None, None] * mean[:, :, None] * mean[:, None, :]
        centred = products[:, 1:, 1:] - apart
        inverse = inverses(centred, ROUNDING * total[:, None] * (mean + self.shift) ** 2)
        spread = np.einsum("nii->ni", centred)
        inverse[(total[:, None] * mean**2 > FAR**2 * spread).any(axis=1)] = np.nan
        bread = with_constant(inverse, mean + self.shift, total)
        return bread, with_constant(inverse, mean, total)

    def _event(self, column: Integers, position: Integers, parameters: Floats) -> Arrays:
        """Parameters as the model has them, expected and abnormal returns of the event days."""
        if self.constant:
            parameters[:, 0] -= parameters[:, 1:] @ self.shift
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
            "parameters": parameters,
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
