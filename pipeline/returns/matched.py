"""Buy-and-hold returns against the company that was most alike before the deal."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd

from pipeline.core.ledger import Action, LedgerEntry, StageLedger
from pipeline.core.prices import Booleans, Floats, Integers, PricePanel
from pipeline.core.tables import typed_frame
from pipeline.core.window import Window

COLUMNS = {
    "window_start": "int64",
    "window_end": "int64",
    "deal": "str",
    "control": "str",
    "distance": "float64",
    "own_return": "float64",
    "control_return": "float64",
    "bhar": "float64",
    "last_session": "int64",
    "reason": "str",
}


@dataclass(frozen=True, slots=True)
class MatchOptions:
    """Windows held, and the candidates' columns that say who is alike."""

    windows: tuple[Window, ...] = ()
    within: tuple[str, ...] = ()
    nearest: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, eq=False)
class _Pool:
    """The candidates a deal may be matched with, nearest first."""

    columns: Integers
    distance: Floats


@dataclass(frozen=True, slots=True)
class _Held:
    """What one unit became from the session before the window to the last one held.

    ``used`` are the controls in order, ``distance`` that of the first.
    """

    own: float
    control: float
    used: tuple[int, ...]
    distance: float
    last: int


@dataclass(frozen=True, slots=True)
class _Deal:
    """A deal in its panel."""

    name: str
    security: str
    exchange: str
    column: int
    position: int
    day_zero: np.datetime64
    counterparty: str


def matched_controls(
    deals: pd.DataFrame,
    events: pd.DataFrame,
    candidates: pd.DataFrame,
    panels: Mapping[str, PricePanel],
    options: MatchOptions,
) -> tuple[pd.DataFrame, StageLedger]:
    """Each deal's buy-and-hold return less that of its control company.

    BHAR = Π(1 + R_i) - Π(1 + R_control) (Barber and Lyon 1997, JFE 43). The control is a candidate
    of the same year, exchange and ``within`` columns, the nearest in the ``nearest`` columns, each
    in standard deviations of that year's candidates. Companies with a deal of their own inside the
    window, and the deal's counterparty, are no controls. When a control's prices end, the next
    nearest takes its place from that session on (Lyon, Barber and Tsai 1999, JF 54); when the
    deal's company's end, both are held to its last session.

    Args:
        deals: deal_id, security, exchange, column, position, day_zero, perhaps counterparty.
        events: security, exchange, column, position of every deal that could be placed.
        candidates: security, exchange, year, as_of, column and the columns of ``options``.
        panels: exchange -> prices.

    Returns:
        One row a window and deal, decimal; ``reason`` says why a deal has no control. And a
        stage that flags those deals, and the controls that were replaced.
    """
    rows: list[dict[str, object]] = []
    entries: list[LedgerEntry] = []
    located = _located(deals)
    pools = list(_pools(located, candidates, options))
    for window in options.windows:
        for event, pool in zip(located, pools, strict=True):
            busy = _busy(events, event, window)
            held = _compared(event, pool, busy, panels[event.exchange], window)
            rows.append(_row(event, held, panels[event.exchange], window))
            entries += _noted(event, held, panels[event.exchange], window)
    return typed_frame(rows, COLUMNS), StageLedger("matched companies", len(deals), tuple(entries))


def _located(deals: pd.DataFrame) -> list[_Deal]:
    day = deals["day_zero"].to_numpy().astype("datetime64[D]")
    other = deals["counterparty"] if "counterparty" in deals else [""] * len(deals)
    text = (deals[name].astype(str) for name in ("deal_id", "security", "exchange"))
    number = (deals[name].astype(int) for name in ("column", "position"))
    return [_Deal(*row) for row in zip(*text, *number, day, other, strict=True)]


def _pools(
    deals: Sequence[_Deal], candidates: pd.DataFrame, options: MatchOptions
) -> Iterator[_Pool | str]:
    """The pool of each deal in order, or why it has none."""
    known = candidates["as_of"].to_numpy().astype("datetime64[D]")
    score = _standardised(candidates, options.nearest)
    codes, columns = candidates["security"].to_numpy(), candidates["column"].to_numpy()
    years, exchanges = candidates["year"].to_numpy(), candidates["exchange"].to_numpy()
    for deal in deals:
        before = known <= deal.day_zero
        own = np.flatnonzero(before & (codes == deal.security))
        if own.size == 0:
            yield "its company is not among the candidates of an earlier date"
            continue
        me = own[np.argmax(known[own])]
        if not np.isfinite(score[me]).all():
            yield "a value to match by is missing"
            continue
        alike = before & (years == years[me]) & (exchanges == deal.exchange) & (columns >= 0)
        for name in options.within:
            values = candidates[name].to_numpy()
            alike &= values == values[me]
        distance = np.sqrt(((score - score[me]) ** 2).sum(axis=1))
        others = ~np.isin(codes, [deal.security, deal.counterparty])
        found = np.flatnonzero(alike & others & np.isfinite(distance))
        order = found[np.lexsort((codes[found], distance[found]))]
        yield _Pool(columns[order], distance[order])


def _standardised(candidates: pd.DataFrame, names: tuple[str, ...]) -> Floats:
    """(n, k) values in standard deviations of their year."""
    values = candidates[list(names)].astype(np.float64)
    spread = values.groupby(candidates["year"]).transform("std")
    return np.asarray((values / spread.where(spread > 0, 1.0)).to_numpy())


def _busy(events: pd.DataFrame, deal: _Deal, window: Window) -> Integers:
    """Columns of companies with a deal of their own inside the window."""
    at = events["position"].to_numpy() - deal.position
    here = (events["exchange"] == deal.exchange).to_numpy()
    inside = here & (at >= window.start) & (at <= window.end)
    return np.asarray(events["column"].to_numpy()[inside])


def _compared(
    deal: _Deal, pool: _Pool | str, busy: Integers, panel: PricePanel, window: Window
) -> _Held | str:
    if isinstance(pool, str):
        return pool
    free = ~np.isin(pool.columns, busy)
    base = deal.position + window.start - 1
    return _held(panel, deal.column, _Pool(pool.columns[free], pool.distance[free]), base,
                 len(window))  # fmt: skip


def _row(deal: _Deal, held: _Held | str, panel: PricePanel, window: Window) -> dict[str, object]:
    shared = {"window_start": window.start, "window_end": window.end, "deal": deal.name}
    if isinstance(held, str):
        nothing = dict.fromkeys(("distance", "own_return", "control_return", "bhar"), np.nan)
        return {**shared, **nothing, "control": "", "last_session": 0, "reason": held}
    return {
        **shared,
        "control": ", ".join(panel.securities[column] for column in held.used),
        "distance": held.distance,
        "own_return": held.own - 1,
        "control_return": held.control - 1,
        "bhar": held.own - held.control,
        "last_session": held.last - deal.position,
        "reason": "",
    }


def _noted(deal: _Deal, held: _Held | str, panel: PricePanel, window: Window) -> list[LedgerEntry]:
    """A flag for a deal without a control, and for a control that another replaced."""
    if isinstance(held, str):
        return [LedgerEntry(deal.name, "no_control", Action.FLAGGED, held, window.label)]
    if len(held.used) == 1:
        return []
    names = " then ".join(panel.securities[column] for column in held.used)
    return [LedgerEntry(deal.name, "control_replaced", Action.FLAGGED, names, window.label)]


def _held(panel: PricePanel, own: int, pool: _Pool, base: int, length: int) -> _Held | str:
    """Both holdings from the close of session ``base`` on; or why there is no comparison."""
    if base < 0 or not np.isfinite(panel.close[base, own]):
        return "its company has no price on the session before the window"
    if base + length >= len(panel.sessions):
        return "the price history ends inside the window"
    end = _last_earned(panel, own, base, base + length)
    growth, at = 1.0, base
    used: list[int] = []
    for control in pool.columns:
        if not np.isfinite(panel.close[at, control]):
            continue
        used.append(int(control))
        stop = _last_earned(panel, control, at, end)
        if stop == end or np.isfinite(panel.close[end:, control]).any():
            growth *= _growth(panel, control, at, end)
            nearest = float(pool.distance[pool.columns == used[0]][0])
            return _Held(_growth(panel, own, base, end), growth, tuple(used), nearest, end)
        growth *= _growth(panel, control, at, stop)
        at = stop
    return "no company like it is left to compare it with"


def _last_earned(panel: PricePanel, column: int, first: int, last: int) -> int:
    """The last session after ``first`` with a close or a return, or ``first``."""
    after = slice(first + 1, last + 1)
    earned: Booleans = np.isfinite(panel.close[after, column])
    earned |= np.isfinite(panel.returns[after, column])
    return first + 1 + int(np.flatnonzero(earned).max(initial=-1))


def _last_quote(panel: PricePanel, column: int, first: int, last: int) -> int:
    """The last session from ``first`` to ``last`` with a close."""
    quoted: Booleans = np.isfinite(panel.close[first : last + 1, column])
    return first + int(np.flatnonzero(quoted).max())


def _growth(panel: PricePanel, column: int, first: int, last: int) -> float:
    """Value on session ``last`` of one unit held from the close of ``first``.

    From close to last close, and by what was earned on sessions without one (a delisting return).
    """
    stop = _last_quote(panel, column, first, last)
    after = panel.returns[stop + 1 : last + 1, column]
    rest = np.prod(1 + after[np.isfinite(after)])
    return float(panel.close[stop, column] / panel.close[first, column] * rest)
