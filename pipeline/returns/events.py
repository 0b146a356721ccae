"""From a deal list to located events, and the screens that decide which of them are measured."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd

from pipeline.core.ledger import Action, LedgerEntry, StageLedger
from pipeline.core.prices import Booleans, Integers, PricePanel
from pipeline.core.window import Window
from pipeline.returns.day_zero import DayZero, ledger_entry, place
from pipeline.returns.sessions import Sessions


@dataclass(frozen=True, slots=True)
class EventOptions:
    """How events are placed and screened; see the study file's [event_time] for each."""

    estimation: Window
    headline: Window
    span: Window
    minimum_observations: int
    cutoff_minutes: int
    mask_sessions: int
    confounding_days: int
    real_jumps: frozenset[str] = frozenset()
    confounding: str = "flag"
    repeats: str = "keep_first"
    earliest: bool = False
    longest_halt: int = 10


@dataclass(frozen=True, slots=True)
class Located:
    """One event in its exchange's panel: the column of its code there, the session of day zero."""

    deal: str
    security: str
    exchange: str
    column: int
    position: int


def located_events(frame: pd.DataFrame) -> list[Located]:
    """The rows of a located deal list as values."""
    names = ("deal_id", code_column(frame), "exchange")
    texts = [frame[name].astype(str).tolist() for name in names]
    numbers = [frame[name].astype(int).tolist() for name in ("column", "position")]
    return [
        Located(deal, security, exchange, column, position)
        for deal, security, exchange, column, position in zip(*texts, *numbers, strict=True)
    ]


def code_column(frame: pd.DataFrame) -> str:
    """The column that holds each row's code in the price file.

    ``line`` where companies have several listings and one was chosen, else ``security``.
    """
    return "line" if "line" in frame else "security"


def locate(
    deals: pd.DataFrame,
    panels: Mapping[str, PricePanel],
    calendars: Mapping[str, Sessions],
    options: EventOptions,
) -> tuple[pd.DataFrame, StageLedger]:
    """Place every deal on its exchange's sessions and its security's column.

    Args:
        deals: deal_id, security (and ``line``, if listings were chosen), exchange, announced_utc,
            announced_date.

    Returns:
        The deals kept, in the order given, with ``column``, ``position`` (session of day zero),
        ``day_zero``, ``day_zero_close``, ``announced_local`` (both on the exchange's clock),
        ``timing`` and ``day_zero_reason``; and the stage's ledger. A deal leaves if its security
        has no prices or its headline window is outside the price history.
    """
    entries: list[LedgerEntry] = []
    parts: list[pd.DataFrame] = []
    for exchange, own in deals.groupby("exchange", sort=True):
        panel, sessions = panels[str(exchange)], calendars[str(exchange)]
        placed = place(
            own["announced_utc"].dt.tz_localize(None).to_numpy().astype("datetime64[s]"),
            own["announced_date"].to_numpy().astype("datetime64[D]"),
            sessions,
            options.cutoff_minutes,
        )
        codes = own[code_column(deals)]
        column = _columns(codes, panel)
        outside = (placed.position + options.headline.start < 1) | (
            placed.position + options.headline.end >= len(panel.sessions)
        )
        day_zero = np.append(sessions.days, np.datetime64("NaT"))[placed.position]
        located = _placed(own, column, placed, day_zero)
        entries += _drops(located["deal_id"], column < 0, "no_prices", codes)
        entries += _drops(
            located["deal_id"],
            outside & (column >= 0),
            "outside_history",
            day_zero,
            f"prices from {panel.sessions[0]} to {panel.sessions[-1]}",
        )
        kept = (column >= 0) & ~outside
        moved = (
            ledger_entry(deal, timing, day)
            for deal, timing, day, keep in zip(
                own["deal_id"], placed.timing, day_zero, kept, strict=True
            )
            if keep
        )
        entries += [entry for entry in moved if entry is not None]
        parts.append(located[kept])
    return pd.concat(parts).sort_index(), StageLedger("day zero", len(deals), tuple(entries))


def _columns(codes: pd.Series, panel: PricePanel) -> Integers:
    """(n,) places of codes in a panel; -1 for one without prices."""
    columns = {code: at for at, code in enumerate(panel.securities)}
    return np.asarray(codes.map(columns).fillna(-1).to_numpy().astype(np.int64))


def _placed(
    own: pd.DataFrame, column: Integers, placed: DayZero, day_zero: np.ndarray
) -> pd.DataFrame:
    return own.assign(
        column=column,
        position=placed.position,
        day_zero=day_zero,
        day_zero_close=list(placed.closes),
        announced_local=list(placed.stamps),
        timing=[str(timing) for timing in placed.timing],
        day_zero_reason=list(placed.reasons),
    )


def _drops(
    deals: Iterable[str],
    which: np.ndarray,
    rule: str,
    values: Iterable[object],
    threshold: str = "",
) -> list[LedgerEntry]:
    return [
        LedgerEntry(str(deal), rule, Action.DROPPED, str(value), threshold)
        for deal, out, value in zip(deals, which, values, strict=True)
        if out
    ]


def masked_sessions(
    kept: pd.DataFrame,
    located: pd.DataFrame,
    estimation: Window,
    around: int,
    panels: Mapping[str, PricePanel],
) -> Booleans:
    """(N, E) estimation sessions within ``around`` sessions of another deal of the company.

    Args:
        kept: security, exchange and position of N deals.
        located: the same of all deals, and day_zero. A deal placed on another exchange counts at
            the first session here on or after its day zero there.
        estimation: the estimation window.
        around: sessions either side.
        panels: exchange -> prices.
    """
    masked = np.zeros((len(kept), len(estimation)), dtype=np.bool_)
    at = kept["position"].to_numpy(np.int64)
    codes = pd.Index(located["security"].unique())
    own, others = codes.get_indexer(kept["security"]), codes.get_indexer(located["security"])
    for exchange in kept["exchange"].unique():
        rows = np.flatnonzero((kept["exchange"] == exchange).to_numpy())
        here = _sessions_here(located, exchange, panels)
        first = at[rows] + estimation.start
        row, session = _near(own[rows], first, others, here, len(estimation), around)
        apart = session != at[rows][row]
        row, session = rows[row[apart]], session[apart]
        for step in range(-around, around + 1):
            day = session + step - at[row] - estimation.start
            inside = (day >= 0) & (day < len(estimation))
            masked[row[inside], day[inside]] = True
    return masked


def _sessions_here(
    located: pd.DataFrame, exchange: str, panels: Mapping[str, PricePanel]
) -> Integers:
    """(m,) day zero of every deal on this exchange: its own there, else the first from its day."""
    here = located["position"].to_numpy(np.int64).copy()
    away = (located["exchange"] != exchange).to_numpy()
    if away.any():
        days = located["day_zero"].to_numpy()[away].astype("datetime64[D]")
        here[away] = panels[exchange].sessions.searchsorted(days)
    return here


def _near(
    own: Integers, first: Integers, others: Integers, here: Integers, length: int, around: int
) -> tuple[Integers, Integers]:
    """Pairs of a row and the session of a deal of its company near the row's run of sessions.

    Args:
        own: (n,) company of each row.
        first: (n,) first session of each run of ``length``.
        others: (m,) company of each deal.
        here: (m,) its session.
        around: sessions that a deal may lie before or after the run.
    """
    base = min(int(first.min()) - around, int(here.min(initial=0)))
    width = max(int(first.max()) + length + around, int(here.max(initial=0))) - base + 1
    key = np.sort(others * width + here - base)
    low = np.searchsorted(key, own * width + first - around - base)
    high = np.searchsorted(key, own * width + first + length - 1 + around - base, side="right")
    count = high - low
    row = np.repeat(np.arange(len(own)), count)
    place = np.arange(len(row)) - np.repeat(np.cumsum(count) - count, count) + low[row]
    return row, key[place] % width + base


def locate_candidates(candidates: pd.DataFrame, panels: Mapping[str, PricePanel]) -> pd.DataFrame:
    """The candidates with ``column`` (-1 without prices) and ``position`` of their date."""
    column = np.full(len(candidates), -1, dtype=np.int64)
    position = np.zeros(len(candidates), dtype=np.int64)
    codes = candidates[code_column(candidates)]
    exchanges = candidates["exchange"].to_numpy()
    days = candidates["as_of"].to_numpy().astype("datetime64[D]")
    for exchange, panel in panels.items():
        here = exchanges == exchange
        column[here] = _columns(codes[here], panel)
        position[here] = np.searchsorted(panel.sessions, days[here])
    return candidates.assign(column=column, position=position)
