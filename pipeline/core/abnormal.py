"""Abnormal returns of N events over D days, with the facts of their estimation."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from pipeline.core.prices import Booleans, Dates, Floats, Integers
from pipeline.core.sessions import SessionRuns
from pipeline.core.window import Window

ARRAYS = (
    "returns",
    "days",
    "regressors",
    "bread",
    "parameters",
    "residual_variance",
    "observations",
    "estimation_returns",
    "estimation_sessions",
    "expected",
)
# None when every return covers one session, and when no session is left out.
OPTIONAL = ("spans", "estimation_spans", "left_out")


@dataclass(frozen=True, eq=False)
class AbnormalReturns:
    """One expected-return model's abnormal returns.

    Attributes:
        model: the expected-return model's key.
        deals: N deal identifiers.
        span: the event days covered, D of them.
        returns: (N, D) abnormal returns, decimal; NaN where the share did not trade.
        days: (N, D) ``datetime64[D]`` calendar date of each event day; NaT outside the panel.
        regressors: (N, D, d) event-window regressors X*; d may be 0.
        bread: (N, d, d) inverse of X'X over the estimation window.
        parameters: (N, d) estimated mean parameters, the constant first.
        residual_variance: (N,) s² = e'e / (M - d), per session.
        observations: (N,) M, returns used in estimation.
        estimation_returns: (N, E) abnormal returns of the estimation window; NaN where unused.
        estimation_sessions: where they lie; ``estimation_days`` lays out their dates.
        expected: (N, D) expected returns, decimal.
        spans: (N, D) sessions each event-window return covers; None if each covers one.
        estimation_spans: (N, E) the same of the estimation window.
        left_out: (N, D) days that traded and whose abnormal return a dummy has taken up, so that
            ``returns`` holds NaN; None without one.
    """

    model: str
    deals: tuple[str, ...]
    span: Window
    returns: Floats
    days: Dates
    regressors: Floats
    bread: Floats
    parameters: Floats
    residual_variance: Floats
    observations: Integers
    estimation_returns: Floats
    estimation_sessions: SessionRuns
    expected: Floats
    spans: Integers | None = None
    estimation_spans: Integers | None = None
    left_out: Booleans | None = None

    def __post_init__(self) -> None:
        n, width = len(self.deals), len(self.span)
        if self.returns.shape != (n, width) or self.days.shape != (n, width):
            raise ValueError(f"abnormal returns {self.returns.shape}, expected {(n, width)}")
        if self.regressors.shape[:2] != (n, width) or self.bread.shape[0] != n:
            raise ValueError("regressors and bread must have one slice an event")

    @property
    def mean_parameters(self) -> int:
        """d, the number of estimated mean parameters."""
        return int(self.regressors.shape[2])

    @cached_property
    def degrees_of_freedom(self) -> Integers:
        """(N,) M - d."""
        return self.observations - self.mean_parameters

    @property
    def estimation_days(self) -> Dates:
        """(N, E) ``datetime64[D]`` dates of the estimation windows; NaT outside the panel."""
        return self.estimation_sessions.dates()

    def columns(self, window: Window) -> slice:
        """Where ``window`` lies among the D days.

        Raises:
            ValueError: if it reaches outside the days held.
        """
        if window.start < self.span.start or window.end > self.span.end:
            raise ValueError(f"window {window.label} is outside the days held {self.span.label}")
        first = window.start - self.span.start
        return slice(first, first + len(window))

    def complete(self, window: Window, share: float = 1.0) -> Booleans:
        """(N,) whether at least ``share`` of the window's days traded, day 0 (if in it) among them.

        A missing day is not a zero. Common practice, no source. A day that was left out did trade.
        """
        inside = np.isfinite(self.counted(window))
        enough = inside.mean(axis=1) >= share - 1e-12
        if window.start <= 0 <= window.end:
            enough &= inside[:, -window.start]
        if self.left_out is not None:
            enough &= np.isfinite(self.returns[:, self.columns(window)]).any(axis=1)
        return np.asarray(enough, dtype=np.bool_)

    def counted(self, window: Window) -> Floats:
        """(N, L) abnormal returns of the window, zero on days left out, NaN on those missing."""
        where = self.columns(window)
        inside = self.returns[:, where]
        return inside if self.left_out is None else np.where(self.left_out[:, where], 0.0, inside)

    def car(self, window: Window) -> Floats:
        """(N,) cumulative abnormal return, decimal: the sum over the window's traded days."""
        total = np.nansum(self.returns[:, self.columns(window)], axis=1)
        return np.asarray(total, dtype=np.float64)

    def bhar(self, window: Window, *, log: bool = False) -> Floats:
        """(N,) buy-and-hold abnormal return, decimal: prod(1 + R) - prod(1 + E[R]).

        Barber and Lyon (1997, JFE 43). Where returns are logarithmic (``log``), each product is
        the exponential of the sum. Days that did not trade, and days left out, count as zero.
        """
        where = self.columns(window)
        traded = np.isfinite(self.returns[:, where])
        expected = np.where(traded, self.expected[:, where], 0.0)
        realised = np.where(traded, self.returns[:, where] + self.expected[:, where], 0.0)
        if log:
            return np.asarray(np.exp(realised.sum(axis=1)) - np.exp(expected.sum(axis=1)))
        return np.asarray((1 + realised).prod(axis=1) - (1 + expected).prod(axis=1))

    def forecast_covariance(self, window: Window) -> Floats:
        """(N, L, L) forecast-error covariance of the window's abnormal returns.

        V = s² [G + X* (X'X)⁻¹ X*'] (Patell 1976; Campbell, Lo and MacKinlay 1997, ch. 4). G is
        diagonal, the sessions each return covers: ones, unless returns span sessions without a
        close (Maynes and Rumsey 1993, JBF 17). Rows and columns of days that did not trade are
        zero.
        """
        where = self.columns(window)
        traded = np.isfinite(self.returns[:, where])
        x = np.where(traded[:, :, None], self.regressors[:, where], 0.0)
        shape = np.einsum("nld,nde,nme->nlm", x, self.bread, x)
        shape += self._covered(window)[:, :, None] * np.eye(traded.shape[1])
        return np.asarray(self.residual_variance[:, None, None] * shape)

    def car_variance(self, window: Window) -> Floats:
        """(N,) forecast-error variance of the CAR, 1'V1, decimal squared."""
        where = self.columns(window)
        traded = np.isfinite(self.returns[:, where])
        total = np.where(traded[:, :, None], self.regressors[:, where], 0.0).sum(axis=1)
        estimation = np.vecdot(np.matmul(self.bread, total[:, :, None])[..., 0], total)
        own = self._covered(window).sum(axis=1)
        return np.asarray(self.residual_variance * (own + estimation))

    def _covered(self, window: Window) -> Integers:
        """(N, L) sessions each return of the window covers; 0 on a day that did not trade."""
        where = self.columns(window)
        traded = np.isfinite(self.returns[:, where])
        return np.asarray(traded * (1 if self.spans is None else self.spans[:, where]))

    def standardised(self, window: Window) -> Floats:
        """(N,) SCAR, the CAR over its forecast standard deviation; NaN without a traded day."""
        with np.errstate(invalid="ignore"):
            return np.asarray(self.car(window) / np.sqrt(self.car_variance(window)))

    @property
    def _held(self) -> tuple[str, ...]:
        """Names of the arrays that are there, one row an event each."""
        return ARRAYS + tuple(name for name in OPTIONAL if getattr(self, name) is not None)

    def select(self, keep: Booleans) -> AbnormalReturns:
        """The events where ``keep`` (N,) is true; the same object if that is all of them."""
        return self if keep.all() else self.take(np.flatnonzero(keep))

    def take(self, rows: Integers | slice) -> AbnormalReturns:
        """The events at ``rows``, in that order; a slice looks at them in place."""
        deals = (
            self.deals[rows]
            if isinstance(rows, slice)
            else tuple(self.deals[row] for row in rows.tolist())
        )
        return AbnormalReturns(
            model=self.model,
            deals=deals,
            span=self.span,
            **{name: getattr(self, name)[rows] for name in self._held},
        )
