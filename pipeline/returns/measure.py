"""Abnormal returns of all located events, whatever their exchange, in the order of the deals."""

from __future__ import annotations

from collections.abc import Callable, Mapping

import numpy as np
import pandas as pd

from pipeline.core.abnormal import AbnormalReturns, concatenate
from pipeline.core.prices import Booleans, Floats, PricePanel
from pipeline.core.window import Window
from pipeline.returns.fit import Events, fit_events

ModelFunction = Callable[[PricePanel], tuple[Floats, Floats]]


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
        function: panel -> (offset, regressors).
        located: deal_id, exchange, column, position; N rows.
        masked: (N, E) estimation sessions not to use.
        panels: exchange -> prices.
        estimation, span: the estimation window and the event days wanted.

    Returns:
        Abnormal returns in the order of ``located``.
    """
    parts: list[AbnormalReturns] = []
    rows: list[np.ndarray] = []
    exchanges = located["exchange"].to_numpy()
    for exchange in sorted(set(exchanges)):
        here = np.flatnonzero(exchanges == exchange)
        own = located.iloc[here]
        # Neighbours in memory first: events of one security read the same column.
        order = np.lexsort((own["position"].to_numpy(), own["column"].to_numpy()))
        own, here = own.iloc[order], here[order]
        panel = panels[exchange]
        offset, regressors = function(panel)
        events = Events(
            deals=tuple(own["deal_id"]),
            column=own["column"].to_numpy(),
            position=own["position"].to_numpy(),
            masked=masked[here],
        )
        parts.append(fit_events(model, offset, regressors, panel, events, estimation, span))
        rows.append(here)
    together = concatenate(parts)
    return together.take(np.argsort(np.concatenate(rows)))
