"""Abnormal returns with dependence, gaps and dates of their own, for the tests of tests."""

from __future__ import annotations

import numpy as np

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.prices import Floats
from pipeline.core.window import Window
from pipeline.significance.dependence import Dependence
from pipeline.significance.sample import CarSample
from tests.returns.panels import fitted, panel_of_returns, weekdays

ESTIMATION, SPAN, WINDOW = Window(-120, -21), Window(-5, 5), Window(-1, 1)


def clustered(
    deals: int = 16, days: int = 30, correlation: float = 0.3, seed: int = 6, gaps: int = 60
) -> AbnormalReturns:
    """Deals within ``days`` sessions whose residuals share a factor; some returns are missing,
    outside the windows around the announcement."""
    stream = np.random.default_rng(seed)
    sessions = days + 160
    position = np.sort(stream.integers(0, days, deals)) + 140
    market = stream.normal(0, 0.01, sessions)
    common = stream.normal(size=(sessions, 1))
    own = stream.normal(size=(sessions, deals))
    noise = np.sqrt(correlation) * common + np.sqrt(1 - correlation) * own
    returns = market[:, None] + noise * stream.uniform(0.01, 0.03, deals)
    returns[stream.integers(0, 110, gaps), stream.integers(0, deals, gaps)] = np.nan
    panel = panel_of_returns(weekdays(sessions), returns, market)
    return fitted("market_model", panel, np.arange(deals), position, ESTIMATION, SPAN)


def sample_of(
    car: Floats, std_dev: Floats, df: int = 98, link: Dependence | None = None
) -> CarSample:
    """A sample from CARs and their forecast standard deviations."""
    alone = Dependence(np.nan, 0.0, 0, 0.0, np.nan, len(car), 1)
    degrees = np.full(len(car), df, dtype=np.int64)
    return CarSample(WINDOW, car, car / std_dev, std_dev, degrees, link or alone)


def linked(weighted: float, mean: float = 0.1) -> Dependence:
    """A dependence of the strength named."""
    return Dependence(mean, weighted, 10, 0.5, 0.01, 3, 4)
