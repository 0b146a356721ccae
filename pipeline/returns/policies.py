"""What becomes of a session without a close, and of the kind of return that is added up."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import replace

import numpy as np

from pipeline.core.findings import problem
from pipeline.core.prices import Booleans, Floats, Integers, PricePanel

Panels = Mapping[str, PricePanel]


def measured_on(panels: Panels, missing: str, kind: str) -> Panels:
    """The panels that abnormal returns are measured on.

    Args:
        panels: exchange -> prices with simple returns that never span a gap.
        missing: ``drop`` leaves them so; ``trade_to_trade`` gives each close the return since the
            last one and says how many sessions it covers (Maynes and Rumsey 1993, JBF 17);
            ``lumped`` gives the sessions between two closes a return of zero and the second close
            all of it.
        kind: ``simple`` or ``log``.

    Raises:
        InputProblem: ``total_loss`` if a return to be taken in logarithms is -100% or below.
    """
    changes: list[Callable[[PricePanel], PricePanel]] = []
    if missing != "drop":
        changes.append(MISSING[missing])
    if kind == "log":
        changes.append(in_logs)
    for change in changes:
        panels = {name: change(panel) for name, panel in panels.items()}
    return panels


def since_last_close(close: Floats) -> tuple[Floats, Integers]:
    """(T, S) returns since the last close before, and the sessions each covers (1 without one)."""
    at = np.arange(len(close))[:, None]
    last = np.maximum.accumulate(np.where(np.isfinite(close), at, -1), axis=0)
    before = np.vstack([np.full((1, close.shape[1]), -1), last[:-1]])
    known = np.isfinite(close) & (before >= 0)
    base = np.take_along_axis(close, np.maximum(before, 0), axis=0)
    with np.errstate(divide="ignore", invalid="ignore"):
        returns = np.where(known, close / base - 1, np.nan)
    return np.asfortranarray(returns), np.asfortranarray(np.where(known, at - before, 1))


def trade_to_trade(panel: PricePanel) -> PricePanel:
    """The panel with the return since the last close, which may cover several sessions."""
    returns, spans = since_last_close(panel.close)
    return replace(panel, returns=returns, spans=spans)


def lumped(panel: PricePanel) -> PricePanel:
    """The panel with zero on sessions without a close inside a listing's life.

    The next close takes the whole move. Understates variance and beta (Maynes and Rumsey 1993,
    JBF 17): for comparison alone.
    """
    returns, _ = since_last_close(panel.close)
    idle = alive(panel) & ~np.isfinite(panel.close)
    return replace(panel, returns=np.asfortranarray(np.where(idle, 0.0, returns)))


def alive(panel: PricePanel) -> Booleans:
    """(T, S) whether the security has been quoted before or on the session and will be later.

    Sessions of which no price was read do not count.
    """
    quoted = np.isfinite(panel.close)
    started = np.maximum.accumulate(quoted, axis=0)
    going = np.maximum.accumulate(quoted[::-1], axis=0)[::-1]
    lives = started & going
    return np.asarray(lives if panel.asked is None else lives & panel.asked)


def in_logs(panel: PricePanel) -> PricePanel:
    """The panel with r = ln(1 + R) of securities and benchmark; factors are as given.

    Raises:
        InputProblem: ``total_loss`` for a return of -100% or below.
    """
    lost = np.argwhere(panel.returns <= -1)
    if len(lost):
        row, column = lost[0]
        raise problem(
            "total_loss",
            "prices",
            column="close",
            got=f"{panel.securities[column]} lost everything on {panel.sessions[row]}",
            expected="returns above -100%, of which there is a logarithm",
            remedy="Set event_time.returns = 'simple'.",
        )
    return replace(
        panel,
        returns=np.asfortranarray(np.log1p(panel.returns)),
        benchmark=np.log1p(panel.benchmark),
    )


MISSING = {"trade_to_trade": trade_to_trade, "lumped": lumped}
