"""What a test of the mean abnormal return may see."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.prices import Dates, Floats, Integers
from pipeline.core.sessions import SessionRuns
from pipeline.core.window import Window
from pipeline.significance.dependence import Dependence, Known, dependence, links


@dataclass(frozen=True, slots=True, eq=False)
class Series:
    """The daily abnormal returns behind n CARs.

    Attributes:
        event: (n, L) the window's, decimal; NaN where the share did not trade.
        estimation: (n, E) the estimation window's; NaN where unused.
        residual_sd: (n,) s of each estimation.
        sessions: n runs of E sessions, where ``estimation`` lies.
        event_spans: (n, L) sessions each return covers; None if each covers one.
        estimation_spans: (n, E) likewise.
    """

    event: Floats
    estimation: Floats
    residual_sd: Floats
    sessions: SessionRuns | None = None
    event_spans: Integers | None = None
    estimation_spans: Integers | None = None

    def alike(self) -> tuple[Floats, Floats]:
        """(n, E) and (n, L) returns of one variance a deal: over the root of what each covers.

        Maynes and Rumsey 1993, JBF 17.
        """
        if self.event_spans is None or self.estimation_spans is None:
            return self.estimation, self.event
        before = self.estimation / np.sqrt(self.estimation_spans)
        return before, self.event / np.sqrt(self.event_spans)


@dataclass(frozen=True, slots=True, eq=False)
class CarSample:
    """CARs of n deals in one window under one model.

    Attributes:
        window: the window.
        car: (n,) decimal.
        scar: (n,) standardised by the forecast-error standard deviation.
        std_dev: (n,) that standard deviation.
        df: (n,) M - d of each estimation window.
        dependence: correlation and overlap among the deals.
        series: the daily returns behind them; tests that need them do without an answer if absent.
        dates: (n,) ``datetime64[D]`` dates of the window's first day, or None.
        seed: of the tests that resample.
    """

    window: Window
    car: Floats
    scar: Floats
    std_dev: Floats
    df: Integers
    dependence: Dependence
    series: Series | None = None
    dates: Dates | None = None
    seed: int = 20260301

    @property
    def n(self) -> int:
        """Deals."""
        return len(self.car)


def car_sample(
    abnormal: AbnormalReturns,
    window: Window,
    share_of_days: float,
    known: Known | None = None,
    seed: int = 20260301,
) -> CarSample:
    """The deals that traded on enough days of ``window``, as a sample.

    ``known`` are the links of all deals of ``abnormal``, if they were made before.
    """
    enough = abnormal.complete(window, share_of_days)
    known = known or links(abnormal)
    kept = abnormal
    if not enough.all():
        kept, known = abnormal.select(enough), known.take(np.flatnonzero(enough))
    link = dependence(kept, window, known)
    std_dev = np.sqrt(kept.car_variance(window))
    car = kept.car(window)
    where = kept.columns(window)
    series = Series(
        kept.returns[:, where],
        kept.estimation_returns,
        np.sqrt(kept.residual_variance),
        kept.estimation_sessions,
        None if kept.spans is None else kept.spans[:, where],
        kept.estimation_spans,
    )
    return CarSample(
        window=window,
        car=car,
        scar=car / std_dev,
        std_dev=std_dev,
        df=kept.degrees_of_freedom,
        dependence=link,
        series=series,
        dates=kept.days[:, where.start],
        seed=seed,
    )
