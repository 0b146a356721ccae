"""Abnormal returns of all located events, whatever their exchange, in the order of the deals."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.prices import Booleans, Integers, PricePanel
from pipeline.core.sessions import SessionRuns
from pipeline.core.window import Window
from pipeline.returns.expected import MeanModel
from pipeline.returns.fit import Engine, Events

ModelFunction = Callable[[PricePanel], MeanModel]


def measure(
    model: str,
    function: ModelFunction,
    located: pd.DataFrame,
    masked: Booleans,
    panels: Mapping[str, PricePanel],
    estimation: Window,
    span: Window,
) -> AbnormalReturns:
    """Fit one expected-return model to every event.

    Args:
        model: the model's key.
        function: panel -> the model on its sessions.
        located: deal_id, exchange, column, position; N rows.
        masked: (N, E) estimation sessions not to use.
        panels: exchange -> prices.
        estimation, span: the estimation window and the event days wanted.

    Returns:
        Abnormal returns in the order of ``located``.
    """
    places = placed(located)
    made = engines(function, places, panels, estimation, span)
    return fit_all(model, made, places, masked)


@dataclass(frozen=True, slots=True, eq=False)
class Places:
    """Where N events lie.

    Attributes:
        deals: (N,) identifiers.
        exchange: (N,) exchange codes.
        column: (N,) the security's column in the panel of the exchange.
        position: (N,) the session of day zero in that panel.
    """

    deals: np.ndarray
    exchange: np.ndarray
    column: Integers
    position: Integers

    def moved(self, rows: Integers, sessions: Integers) -> Places:
        """The events at ``rows``, each so many sessions later."""
        return Places(
            self.deals[rows],
            self.exchange[rows],
            self.column[rows],
            self.position[rows] + sessions,
        )


def placed(located: pd.DataFrame) -> Places:
    """The places of the events of a table; its columns as of :func:`measure`."""
    return Places(
        deals=located["deal_id"].astype(str).to_numpy(dtype=object),
        exchange=located["exchange"].to_numpy(dtype=object),
        column=located["column"].to_numpy(dtype=np.int64),
        position=located["position"].to_numpy(dtype=np.int64),
    )


def engines(
    function: ModelFunction,
    places: Places,
    panels: Mapping[str, PricePanel],
    estimation: Window,
    span: Window,
) -> dict[str, Engine]:
    """Exchange -> the engine of its panel, ready for any number of events."""
    return {
        exchange: Engine(function(panels[exchange]), panels[exchange], estimation, span)
        for exchange in sorted(set(places.exchange))
    }


def fit_all(
    model: str, engines: Mapping[str, Engine], places: Places, masked: Booleans
) -> AbnormalReturns:
    """Fit every event on the engine of its exchange, in the order of ``places``."""
    column, position = places.column, places.position
    first = next(iter(engines.values()))
    arrays = first.blank(len(column))
    calendar = np.empty(len(column), dtype=np.int64)
    for at, (exchange, engine) in enumerate(engines.items()):
        here = np.flatnonzero(places.exchange == exchange)
        calendar[here] = at
        engine.fit_into(arrays, here, Events(column[here], position[here], masked[here]))
    sessions = SessionRuns(
        calendars=tuple(engine.panel.sessions for engine in engines.values()),
        calendar=calendar,
        first=position + first.estimation.start,
        length=len(first.estimation),
    )
    return AbnormalReturns(
        model=model,
        deals=tuple(places.deals.tolist()),
        span=first.span,
        estimation_sessions=sessions,
        **arrays,
    )
