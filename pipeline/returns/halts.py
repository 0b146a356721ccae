"""Day zero of a share that did not trade after its news."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pandas as pd

from pipeline.core.ledger import Action, LedgerEntry, StageLedger
from pipeline.core.prices import PricePanel
from pipeline.returns.events import EventOptions
from pipeline.returns.sessions import Sessions


def past_halts(
    located: pd.DataFrame,
    at_zero: StageLedger,
    panels: Mapping[str, PricePanel],
    calendars: Mapping[str, Sessions],
    options: EventOptions,
) -> tuple[pd.DataFrame, StageLedger]:
    """Move day zero past sessions of a halt: without a close, or volume zero and the last close.

    The first price that shows the news is that of the next trade. Day zero stays where closes
    repeat and volume is not known, where no trade follows within ``options.longest_halt``
    sessions, and where the headline window would leave the history. Whether a deal is measured
    across the gap is for the policy of missing closes to say.

    Args:
        located: deal_id, exchange, column, position, day_zero, day_zero_close, day_zero_reason.
        at_zero: the stage that placed them.

    Returns:
        The deals, and the stage with a line for each that moved.
    """
    position = located["position"].to_numpy(np.int64).copy()
    day, close = located["day_zero"].to_numpy().copy(), list(located["day_zero_close"])
    reason, entries = list(located["day_zero_reason"]), []
    places = zip(located["exchange"], located["column"].astype(int), strict=True)
    for row, (exchange, column) in enumerate(places):
        panel = panels[exchange]
        at = _next_trade(panel, column, int(position[row]), options.longest_halt)
        if at == position[row] or at + options.headline.end >= len(panel.sessions):
            continue
        halted, traded = panel.sessions[position[row]], panel.sessions[at]
        entries.append(
            LedgerEntry(
                str(located["deal_id"].iloc[row]),
                "halted",
                Action.CHANGED,
                f"no trade on {halted}",
                f"next trade on {traded}",
            )
        )
        position[row], day[row] = at, traded
        close[row] = _clock(calendars[exchange], at)
        reason[row] = f"{reason[row]} Not traded on {halted}; day zero is the next trade, {traded}."
    if not entries:
        return located, at_zero
    moved = located.assign(
        position=position, day_zero=day, day_zero_close=close, day_zero_reason=reason
    )
    return moved, StageLedger(at_zero.stage, at_zero.rows_in, (*at_zero.entries, *entries))


def _clock(sessions: Sessions, at: int) -> str:
    """The closing time of a session on the exchange's own clock."""
    return pd.Timestamp(sessions.closes[at], tz="UTC").tz_convert(sessions.zone).strftime("%H:%M")


def _next_trade(panel: PricePanel, column: int, position: int, longest: int) -> int:
    """The first session from ``position`` on that traded; ``position`` if no halt is seen."""
    close, volume = panel.close[:, column], panel.volume[:, column]
    before = close[:position][np.isfinite(close[:position])]
    if not len(before):
        return position
    absent = np.isnan(close[position])
    for at in range(position, min(position + longest, len(close) - 1) + 1):
        if np.isnan(close[at]) or (volume[at] == 0 and close[at] == before[-1]):
            continue
        return at if absent or volume[at] > 0 else position
    return position
