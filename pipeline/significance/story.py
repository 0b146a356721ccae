"""One deal's whole story, for the member who asks about it by name."""

from __future__ import annotations

from collections.abc import Container
from dataclasses import dataclass

import numpy as np
import pandas as pd

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.estimate import t_reach
from pipeline.core.pictures import PICTURES
from pipeline.core.prices import Floats, Integers
from pipeline.core.window import Window

Rows = list[dict[str, object]]


@dataclass(frozen=True, slots=True)
class Day:
    """One event day: its session, abnormal and expected return (decimal) and half a band."""

    day: int
    date: str
    abnormal: float
    expected: float
    reach: float


@dataclass(frozen=True, slots=True)
class Story:
    """What was measured of one deal.

    Attributes:
        deal: identifier.
        observations: returns in its estimation window.
        parameters: mean parameters, the constant first.
        residual_sd: per session, decimal.
        days: the days around day zero.
        window: the headline window.
        car: decimal, with ``low`` and ``high`` of its own interval.
        scar: standardised.
        rank: of its CAR among ``deals``, 1 the largest.
    """

    deal: str
    observations: int
    parameters: tuple[float, ...]
    residual_sd: float
    days: tuple[Day, ...]
    window: Window
    car: float
    low: float
    high: float
    scar: float
    rank: int
    deals: int


def story_of(deal: str, abnormal: AbnormalReturns, window: Window, level: float) -> Story | None:
    """The story of a measured deal, or None if it was not measured.

    Bands and interval are the deal's own forecast errors with t(M - d) (MacKinlay 1997, JEL 35,
    sec. 5); one deal's interval speaks of that deal alone.
    """
    if deal not in abnormal.deals:
        return None
    at = abnormal.deals.index(deal)
    one = abnormal.take(np.array([at]))
    reach = t_reach(level, float(one.degrees_of_freedom[0]))
    cars = abnormal.car(window)
    car, spread = float(one.car(window)[0]), float(np.sqrt(one.car_variance(window)[0]))
    days = tuple(_day(one, day, reach) for day in range(one.span.start, one.span.end + 1))
    return Story(
        deal=deal,
        observations=int(one.observations[0]),
        parameters=tuple(float(value) for value in one.parameters[0]),
        residual_sd=float(np.sqrt(one.residual_variance[0])),
        days=days,
        window=window,
        car=car,
        low=car - reach * spread,
        high=car + reach * spread,
        scar=car / spread,
        rank=1 + int((cars > car).sum()),
        deals=len(cars),
    )


def stories_of(abnormal: AbnormalReturns, window: Window, level: float, days: pd.DataFrame) -> Rows:
    """What was measured of the deals of ``days``, as rows of ``deal_stories``, among all deals.

    Numbers are those of :func:`story_of`.

    ``rank_standardised`` orders the deals by their standardised reaction; ``traded`` counts the
    sessions of ``days`` (see :func:`days_of`) with a return, ``outside`` those beyond their band.
    """
    beyond = days["abnormal_return"].abs() > days["reach"]
    outside = beyond.groupby(days["deal"], sort=False).sum()
    traded = days.groupby("deal", sort=False)["abnormal_return"].count()
    cars, spread = abnormal.car(window), np.sqrt(abnormal.car_variance(window))
    scars = abnormal.standardised(window)
    ranks, standardised = _ranks(cars), _ranks(scars)
    places = [at for at, deal in enumerate(abnormal.deals) if deal in outside.index]
    dates = abnormal.take(np.array(places, dtype=np.int64)).estimation_days
    rows: Rows = []
    for held, at in enumerate(places):
        deal = abnormal.deals[at]
        half = t_reach(level, float(abnormal.degrees_of_freedom[at])) * float(spread[at])
        rows.append(
            {
                "deal": deal,
                "estimation_first": str(dates[held, 0]),
                "estimation_last": str(dates[held, -1]),
                "sessions": int(dates.shape[1]),
                "observations": int(abnormal.observations[at]),
                "residual_sd": float(np.sqrt(abnormal.residual_variance[at])),
                "car": float(cars[at]),
                "ci_low": float(cars[at]) - half,
                "ci_high": float(cars[at]) + half,
                "scar": float(scars[at]),
                "rank": int(ranks[at]),
                "rank_standardised": int(standardised[at]),
                "traded": int(traded[deal]),
                "outside": int(outside[deal]),
                "deals": len(cars),
            }
        )
    return rows


def _ranks(values: Floats) -> Integers:
    """(N,) 1 for the largest; equal values have the same, the better, rank."""
    return np.asarray(1 + len(values) - np.searchsorted(np.sort(values), values, side="right"))


def days_of(abnormal: AbnormalReturns, level: float, shown: Container[str]) -> pd.DataFrame:
    """The days of the deals ``shown`` with half the band of each, the columns of ``deal_days``.

    A band is the deal's own forecast error of that session with t(M - d), as in :func:`story_of`.
    """
    abnormal = abnormal.select(np.array([deal in shown for deal in abnormal.deals], dtype=bool))
    n, width = abnormal.returns.shape
    reach = np.array([t_reach(level, float(df)) for df in abnormal.degrees_of_freedom])
    days = np.arange(abnormal.span.start, abnormal.span.end + 1)
    spread = np.column_stack([abnormal.car_variance(Window(d, d)) for d in days.tolist()])
    band = np.where(np.isfinite(abnormal.returns), np.sqrt(spread) * reach[:, None], np.nan)
    return pd.DataFrame(
        {
            "deal": np.repeat(np.array(abnormal.deals, dtype=object), width),
            "day": np.tile(days, n),
            "date": np.datetime_as_string(abnormal.days.ravel()),
            "abnormal_return": abnormal.returns.ravel(),
            "expected": abnormal.expected.ravel(),
            "reach": band.ravel(),
        }
    ).astype(PICTURES["deal_days"])


def _day(one: AbnormalReturns, day: int, reach: float) -> Day:
    where = one.columns(Window(day, day)).start
    traded = bool(np.isfinite(one.returns[0, where]))
    spread = float(np.sqrt(one.car_variance(Window(day, day))[0])) if traded else np.nan
    return Day(
        day=day,
        date=str(one.days[0, where]),
        abnormal=float(one.returns[0, where]),
        expected=float(one.expected[0, where]),
        reach=reach * spread,
    )
