"""Abnormal returns of all located events, whatever their exchange, in the order of the deals."""

from __future__ import annotations

from collections.abc import Callable, Mapping

import numpy as np
import pandas as pd

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.prices import Booleans, PricePanel
from pipeline.core.window import Window
from pipeline.returns.expected import MeanModel
from pipeline.returns.fit import Events, blank, fit_into

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
    exchanges = located["exchange"].to_numpy()
    models = {exchange: function(panels[exchange]) for exchange in sorted(set(exchanges))}
    arrays = blank(len(located), next(iter(models.values())), estimation, span)
    for exchange, mean_model in models.items():
        here = np.flatnonzero(exchanges == exchange)
        own = located.iloc[here]
        # Neighbours in memory first: events of one security read the same column.
        order = np.lexsort((own["position"].to_numpy(), own["column"].to_numpy()))
        own, here = own.iloc[order], here[order]
        events = Events(
            deals=tuple(own["deal_id"]),
            column=own["column"].to_numpy(),
            position=own["position"].to_numpy(),
            masked=masked[here],
        )
        fit_into(arrays, here, mean_model, panels[exchange], events, estimation, span)
    return AbnormalReturns(
        model=model, deals=tuple(located["deal_id"].astype(str)), span=span, **arrays
    )
