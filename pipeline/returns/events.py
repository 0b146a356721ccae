"""From a deal list to located events, and the screens that decide which of them are measured."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd

from pipeline.core.ledger import Action, LedgerEntry, StageLedger
from pipeline.core.prices import Booleans, PricePanel
from pipeline.core.window import Window
from pipeline.returns.day_zero import ledger_entry, place, sentence
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


@dataclass(frozen=True, slots=True)
class Located:
    """One event in its exchange's panel: the security's column, the session of day zero."""

    deal: str
    security: str
    exchange: str
    column: int
    position: int


def located_events(frame: pd.DataFrame) -> list[Located]:
    """The rows of a located deal list as values."""
    names = ("deal_id", "security", "exchange")
    texts = [frame[name].astype(str).tolist() for name in names]
    numbers = [frame[name].astype(int).tolist() for name in ("column", "position")]
    return [
        Located(deal, security, exchange, column, position)
        for deal, security, exchange, column, position in zip(*texts, *numbers, strict=True)
    ]


def locate(
    deals: pd.DataFrame,
    panels: Mapping[str, PricePanel],
    calendars: Mapping[str, Sessions],
    options: EventOptions,
) -> tuple[pd.DataFrame, StageLedger]:
    """Place every deal on its exchange's sessions and its security's column.

    Args:
        deals: deal_id, security, exchange, announced_utc, announced_date, earnings_release.

    Returns:
        The deals kept, in the order given, with ``column``, ``position`` (session of day zero),
        ``day_zero``, ``timing`` and ``day_zero_reason``; and the stage's ledger. A deal leaves
        if its security has no prices or its headline window is outside the price history.
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
        columns = {code: at for at, code in enumerate(panel.securities)}
        column = own["security"].map(columns).fillna(-1).to_numpy().astype(np.int64)
        outside = (placed.position + options.headline.start < 1) | (
            placed.position + options.headline.end >= len(panel.sessions)
        )
        day_zero = np.append(sessions.days, np.datetime64("NaT"))[placed.position]
        located = own.assign(
            column=column,
            position=placed.position,
            day_zero=day_zero,
            timing=[str(timing) for timing in placed.timing],
            day_zero_reason=[sentence(t, d) for t, d in zip(placed.timing, day_zero, strict=True)],
        )
        entries += _drops(located["deal_id"], column < 0, "no_prices", own["security"])
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
        entries += _confounded(located[kept], panel, options.confounding_days)
        parts.append(located[kept])
    return pd.concat(parts).sort_index(), StageLedger("day zero", len(deals), tuple(entries))


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


def _confounded(located: pd.DataFrame, panel: PricePanel, days: int) -> list[LedgerEntry]:
    release = located["earnings_release"].to_numpy().astype("datetime64[D]")
    known = ~np.isnat(release)
    at = np.searchsorted(panel.sessions, np.where(known, release, panel.sessions[0]))
    distance = at - located["position"].to_numpy()
    near = known & (np.abs(distance) <= days)
    return [
        LedgerEntry(
            str(deal), "confounded", Action.FLAGGED, f"{gap:+d} sessions", f"{days} sessions"
        )
        for deal, gap, flag in zip(located["deal_id"], distance, near, strict=True)
        if flag
    ]


def keep_first_of_overlapping(
    located: pd.DataFrame, headline: Window
) -> tuple[pd.DataFrame, StageLedger]:
    """Keep the first of a company's deals whose headline windows share a session."""
    order = located.sort_values(["security", "position", "deal_id"])
    keep, entries = [], []
    last: tuple[str, int, str] = ("", 0, "")
    for index, security, position, deal in order[["security", "position", "deal_id"]].itertuples():
        if security == last[0] and position - last[1] < len(headline):
            value = f"{position - last[1]} sessions after {last[2]}"
            entries.append(
                LedgerEntry(
                    str(deal),
                    "overlapping_event",
                    Action.DROPPED,
                    value,
                    f"{len(headline)} sessions",
                )
            )
            continue
        keep.append(index)
        last = (str(security), int(position), str(deal))
    kept = located.loc[sorted(keep)]
    return kept, StageLedger("repeated deals", len(located), tuple(entries))


def masked_sessions(
    kept: pd.DataFrame, located: pd.DataFrame, estimation: Window, around: int
) -> Booleans:
    """(N, E) estimation sessions within ``around`` sessions of another deal of the company."""
    days = np.arange(estimation.start, estimation.end + 1)
    masked = np.zeros((len(kept), len(days)), dtype=np.bool_)
    others = located.groupby("security")["position"].agg(list)
    pairs = zip(kept["security"], kept["position"], strict=True)
    for row, (security, position) in enumerate(pairs):
        for other in others[security]:
            if other != position:
                masked[row] |= np.abs(position + days - other) <= around
    return masked


def locate_candidates(candidates: pd.DataFrame, panels: Mapping[str, PricePanel]) -> pd.DataFrame:
    """The candidates with ``column`` (-1 without prices) and ``position`` of their date."""
    column = np.full(len(candidates), -1, dtype=np.int64)
    position = np.zeros(len(candidates), dtype=np.int64)
    exchanges = candidates["exchange"].to_numpy()
    days = candidates["as_of"].to_numpy().astype("datetime64[D]")
    for exchange, panel in panels.items():
        here = exchanges == exchange
        columns = {code: at for at, code in enumerate(panel.securities)}
        column[here] = candidates.loc[here, "security"].map(columns).fillna(-1).to_numpy()
        position[here] = np.searchsorted(panel.sessions, days[here])
    return candidates.assign(column=column, position=position)
