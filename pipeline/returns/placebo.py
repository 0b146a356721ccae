"""Pseudo-events on dates without an announcement, to see what a test does when nothing happened."""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Mapping
from dataclasses import replace

import numpy as np
import pandas as pd

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.prices import Booleans, Integers, PricePanel
from pipeline.core.window import Window
from pipeline.returns.measure import ModelFunction, engines, fit_all, placed

FARTHEST = 250
# Enough events a batch to use the processor well, few enough to stay small in memory.
BATCH_EVENTS = 2_000


def pseudo_events(
    model: str,
    function: ModelFunction,
    located: pd.DataFrame,
    panels: Mapping[str, PricePanel],
    estimation: Window,
    window: Window,
    *,
    draws: int,
    distance: int,
    minimum_observations: int,
    seed: int,
    announced: pd.DataFrame,
    around: int,
) -> Iterator[tuple[Integers, AbnormalReturns]]:
    """One sample a draw: every deal moved to sessions where its company announced nothing.

    All deals of one date move together by one number of sessions, between ``distance`` and 250 to
    either side, so that a draw is as clustered in time as the sample (methods of Brown and Warner
    1985, JFE 14, on the analyst's own shares). A deal leaves a draw if it would come within
    ``distance`` sessions of an announcement of its company, or if its windows are not there.

    Args:
        model, function: the expected-return model.
        located: deal_id, security, exchange, column, position, day_zero; N rows.
        window: the event days wanted.
        draws: number of samples.
        seed: of the stream of shifts.
        announced: security, exchange, column, position of every deal of the list: the sessions
            within ``around`` of one are not used, as they are not in the sample's own windows.

    Returns:
        Of each draw, the (n,) rows of ``located`` that stay in it, and their abnormal returns.
    """
    shifts = draw_shifts(located["day_zero"], draws, distance, seed)
    free = free_to_move(located, shifts, distance, panels, window)
    places = placed(located)
    quiet = without_announcements(panels, announced, around)
    made = engines(function, places, quiet, estimation, window)
    a_batch = max(1, BATCH_EVENTS // len(located))
    for first in range(0, draws, a_batch):
        batch = slice(first, first + a_batch)
        draw, deal = np.nonzero(free[batch])
        moved = places.moved(deal, shifts[batch][draw, deal])
        masked = np.zeros((len(deal), len(estimation)), dtype=np.bool_)
        together = fit_all(model, made, moved, masked)
        enough = (together.observations >= minimum_observations) & together.complete(window)
        if not enough.all():
            together, draw, deal = together.select(enough), draw[enough], deal[enough]
        ends = np.searchsorted(draw, np.arange(len(free[batch]) + 1))
        for start, end in itertools.pairwise(ends.tolist()):
            yield deal[start:end], together.take(slice(start, end))


def without_announcements(
    panels: Mapping[str, PricePanel], announced: pd.DataFrame, around: int
) -> dict[str, PricePanel]:
    """The panels without the returns of a company within ``around`` sessions of its deals.

    A reaction left in an estimation window would make the share look riskier than it is on dates
    without an announcement, and the tests more cautious than they are.
    """
    quiet = {}
    for name, panel in panels.items():
        own = announced[(announced["exchange"] == name) & (announced["column"] >= 0)]
        returns = panel.returns.copy(order="F")
        for column, position in zip(own["column"], own["position"], strict=True):
            returns[max(position - around, 0) : position + around + 1, column] = np.nan
        quiet[name] = replace(panel, returns=returns)
    return quiet


def draw_shifts(days: pd.Series, draws: int, distance: int, seed: int) -> Integers:
    """(draws, N) sessions to move each deal by: one number a date and draw."""
    stream = np.random.default_rng(seed)
    codes, dates = pd.factorize(days)
    size = stream.integers(distance, FARTHEST + 1, (draws, len(dates)))
    side = stream.choice(np.array([-1, 1]), (draws, len(dates)))
    return np.asarray((size * side)[:, codes])


def free_to_move(
    located: pd.DataFrame,
    shifts: Integers,
    distance: int,
    panels: Mapping[str, PricePanel],
    window: Window,
) -> Booleans:
    """(draws, N) whether a moved deal is inside the history and far from its company's deals."""
    position = located["position"].to_numpy()
    sessions = {name: len(panel.sessions) for name, panel in panels.items()}
    target = position + shifts
    last = located["exchange"].map(sessions).to_numpy()
    free = (target + window.start >= 1) & (target + window.end < last)
    for rows in located.groupby("security").indices.values():
        gaps = np.abs(target[:, rows, None] - position[rows])
        free[:, rows] &= (gaps >= distance).all(axis=2)
    return np.asarray(free)
