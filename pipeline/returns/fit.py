"""The one engine that fits every expected-return model to many events at once."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.prices import Booleans, Dates, Floats, Integers, PricePanel
from pipeline.core.sessions import SessionRuns
from pipeline.core.window import Window
from pipeline.returns.expected import MeanModel
from pipeline.returns.least_squares import least_squares
from pipeline.returns.shared import SharedFits
from pipeline.returns.spans import Compounded

# Small enough for the windows of a chunk to stay in the processor's cache.
CHUNK = 256
Arrays = dict[str, np.ndarray]


@dataclass(frozen=True, slots=True, eq=False)
class Events:
    """N events of one exchange, located in its panel.

    Attributes:
        column: (N,) the security's column.
        position: (N,) the session of day zero.
        masked: (N, E) estimation sessions not to use (another deal of the company is near).
    """

    column: Integers
    position: Integers
    masked: Booleans


def fit_events(
    name: str,
    deals: tuple[str, ...],
    model: MeanModel,
    panel: PricePanel,
    events: Events,
    estimation: Window,
    span: Window,
) -> AbnormalReturns:
    """Abnormal returns of every event of one exchange under one model; see :class:`Engine`."""
    engine = Engine(model, panel, estimation, span)
    arrays = engine.blank(len(deals))
    engine.fit_into(arrays, np.arange(len(deals)), events)
    sessions = engine.sessions(events.position)
    return AbnormalReturns(
        model=name, deals=deals, span=span, estimation_sessions=sessions, **arrays
    )


class Engine:
    """One model on one panel, ready to fit any number of events.

    Least squares an event over its estimation window, deviations from the means first so that no
    digits are lost; s² = e'e / (M - d). Sessions without a return, or masked, are not used.
    MacKinlay 1997, JEL 35, sec. 5; forecast errors in
    :class:`~pipeline.core.abnormal.AbnormalReturns`.

    On a panel whose returns span several sessions each return R over g sessions is matched with
    the regressors compounded over the same g, R = alpha g + beta x + e with var e = g s², least
    squares weighted by 1/g (trade-to-trade returns: Maynes and Rumsey 1993, JBF 17).
    """

    def __init__(self, model: MeanModel, panel: PricePanel, estimation: Window, span: Window):
        """Look at the panel's windows in place.

        Args:
            model: offset and regressors on the panel's sessions.
            panel: prices of the exchange.
            estimation: sessions of the estimation window.
            span: event days wanted.

        Raises:
            ValueError: if a model that aggregates leads and lags, or has a regressor of each
                event, meets returns over several sessions, for which it is not defined.
        """
        if model.aggregate is not None and panel.spans is not None:
            raise ValueError("a model of leads and lags needs returns of one session each")
        if model.own is not None and panel.spans is not None:
            raise ValueError("a model with a regressor of each event needs returns of one session")
        self.model, self.panel, self.estimation, self.span = model, panel, estimation, span
        slopes = model.regressors[:, int(model.constant) :]
        self.compounded = Compounded(np.vstack([model.offset, slopes.T]))
        self.shared = None
        if model.aggregate is None and model.own is None and panel.spans is None:
            self.shared = SharedFits(model, panel, estimation, span)

    def blank(self, n: int) -> Arrays:
        """Empty arrays of :class:`AbnormalReturns` for n events."""
        width, length = len(self.span), len(self.estimation)
        d = self.model.parameters if self.model.aggregate is None else 2
        arrays = {
            "returns": np.empty((n, width)),
            "days": np.empty((n, width), dtype="datetime64[D]"),
            "regressors": np.empty((n, width, d)),
            "bread": np.empty((n, d, d)),
            "parameters": np.empty((n, d)),
            "residual_variance": np.empty(n),
            "observations": np.empty(n, dtype=np.int64),
            "estimation_returns": np.empty((n, length)),
            "expected": np.empty((n, width)),
        }
        if self.panel.spans is not None:
            arrays["spans"] = np.empty((n, width), dtype=np.int64)
            arrays["estimation_spans"] = np.empty((n, length), dtype=np.int64)
        return arrays

    def sessions(self, position: Integers) -> SessionRuns:
        """The estimation windows of N events, as sessions of the panel."""
        return SessionRuns(
            calendars=(self.panel.sessions,),
            calendar=np.zeros(len(position), dtype=np.int64),
            first=position + self.estimation.start,
            length=len(self.estimation),
        )

    def fit_into(self, arrays: Arrays, rows: Integers, events: Events) -> None:
        """Fit N events and write event i to row ``rows[i]`` of ``arrays``."""
        rest = np.arange(len(rows))
        if self.shared is not None:
            rest = self._fit_shared(self.shared, arrays, rows, events)
        for part in _chunks(rest):
            _write(arrays, rows[part], self._fit_ragged(events, part))

    def _fit_shared(
        self, shared: SharedFits, arrays: Arrays, rows: Integers, events: Events
    ) -> Integers:
        """Fit the events inside the panel; those left over, outside it or without a fit."""
        inside = shared.inside(events.position)
        left = ~inside
        for part in _chunks(np.flatnonzero(inside)):
            column, position = events.column[part], events.position[part]
            for own, found in shared.fit(column, position, events.masked[part]):
                _write(arrays, rows[part[own]], found)
                left[part[own]] = ~np.isfinite(found["residual_variance"])
        return np.flatnonzero(left)

    def _fit_ragged(self, events: Events, part: Integers) -> Arrays:
        """Arrays of events one regression each, on the sessions that they have."""
        column, position = events.column[part], events.position[part]
        y, offset, x, covered = self._windows(column, position, self.estimation)
        y = y - offset
        used = np.isfinite(y) & np.isfinite(x).all(axis=0) & ~events.masked[part]
        constant = self.model.constant
        weights = None if self.panel.spans is None else covered.astype(np.float64)
        parameters, bread, scaled = least_squares(y / covered, x / covered, used, constant, weights)
        residuals = scaled * np.sqrt(covered)
        if self.model.aggregate is not None:
            parameters = self.model.aggregate(parameters, y, x, used)
            market = x[len(x) // 2]
            residuals = scaled = y - parameters[:, :1] - parameters[:, 1:] * market
            bread = np.zeros((len(y), 2, 2))
        observations = used.sum(axis=1)
        free = observations - self.model.parameters
        found = {
            **self._event(column, position, parameters),
            "bread": bread,
            "parameters": parameters,
            "residual_variance": _variance(scaled, free, used),
            "observations": observations,
            "estimation_returns": np.where(used, residuals, np.nan),
        }
        return found if weights is None else {**found, "estimation_spans": covered}

    def _event(self, column: Integers, position: Integers, parameters: Floats) -> Arrays:
        """Expected and abnormal returns of the event days, with their regressors."""
        realised, expected, x, covered = self._windows(column, position, self.span)
        if self.model.aggregate is not None:
            x = x[len(x) // 2 : len(x) // 2 + 1]
        columns = [covered, *x] if self.model.constant else list(x)
        regressors = np.stack(columns, axis=2) if columns else np.empty((*realised.shape, 0))
        expected = expected + np.einsum("nld,nd->nl", regressors, parameters)
        found = {
            "returns": realised - expected,
            "expected": expected,
            "regressors": regressors,
            "days": _days(self.panel, position, self.span),
        }
        return found if self.panel.spans is None else {**found, "spans": covered}

    def _windows(
        self, column: Integers, position: Integers, window: Window
    ) -> tuple[Floats, Floats, Floats, Integers]:
        """(n, L) returns, (n, L) offset, (k, n, L) regressors, (n, L) sessions each covers."""
        at, exists = _sessions(self.panel, position, window)
        spans = self.panel.spans
        covered = np.ones_like(at) if spans is None else spans[at, column[:, None]]
        covered = np.where(exists, covered, 1)
        returns = np.where(exists, self.panel.returns[at, column[:, None]], np.nan)
        series = self.compounded.over(at, covered)
        if self.model.own is not None:
            series = np.concatenate([series, [self.model.own(column, position, at)]])
        series = np.where(exists, series, np.nan)
        return returns, series[0], series[1:], covered


def _chunks(rows: Integers) -> Iterator[Integers]:
    for at in range(0, len(rows), CHUNK):
        yield rows[at : at + CHUNK]


def _write(arrays: Arrays, rows: Integers, found: Arrays) -> None:
    """Write to the rows; rows that follow one another as one block, which is faster."""
    block = (np.diff(rows) == 1).all()
    where = slice(rows[0], rows[-1] + 1) if block else rows
    for name, values in found.items():
        arrays[name][where] = values


def _variance(residuals: Floats, free: Integers, used: Booleans) -> Floats:
    clean = np.where(used, residuals, 0.0)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(free > 0, np.vecdot(clean, clean) / free, np.nan)


def _days(panel: PricePanel, position: Integers, window: Window) -> Dates:
    """(n, L) dates of the window's sessions; NaT beyond the panel's ends."""
    at, exists = _sessions(panel, position, window)
    return np.where(exists, panel.sessions[at], np.datetime64("NaT"))


def _sessions(panel: PricePanel, position: Integers, window: Window) -> tuple[Integers, Booleans]:
    """(n, L) sessions of the window, the nearest one beyond the ends, and whether they exist."""
    at = position[:, None] + np.arange(window.start, window.end + 1)
    last = len(panel.sessions) - 1
    return np.clip(at, 0, last), (at >= 0) & (at <= last)
