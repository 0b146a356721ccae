"""From a deal list to located events, and the screens that decide which of them are measured."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.ledger import Action, LedgerEntry, StageLedger
from pipeline.core.prices import Booleans, PricePanel
from pipeline.core.window import Window
from pipeline.returns.day_zero import ledger_entry, place, sentence
from pipeline.returns.panel import suspected_splits
from pipeline.returns.sessions import Sessions

ZERO_RETURNS_DROP = 0.5
ZERO_RETURNS_FLAG = 0.2
LARGE_RETURN = 0.5


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


def screen_estimation(
    located: pd.DataFrame,
    abnormal: AbnormalReturns,
    panels: Mapping[str, PricePanel],
    masked: Booleans,
    options: EventOptions,
) -> tuple[Booleans, StageLedger]:
    """Which events have a usable estimation window, by the first rule each fails.

    The rules in order: suspected split, too few returns, no fit, too many zero returns.
    """
    splits = {exchange: suspected_splits(panel) for exchange, panel in panels.items()}
    entries: list[LedgerEntry] = []
    keep = np.ones(len(located), dtype=np.bool_)
    for row, event in enumerate(located_events(located)):
        panel = panels[event.exchange]
        verdict = _split_verdict(event, splits[event.exchange], panel, options) or (
            _estimation_verdict(event, abnormal, row, panel, options)
        )
        if verdict is not None:
            entries.append(verdict)
            keep[row] = verdict.action is not Action.DROPPED
        if keep[row] and masked[row].any():
            entries.append(
                LedgerEntry(
                    event.deal,
                    "masked_sessions",
                    Action.CHANGED,
                    f"{int(masked[row].sum())} sessions left out",
                    f"{options.mask_sessions} sessions around another deal",
                )
            )
    return keep, StageLedger("estimation window", len(located), tuple(entries))


def _split_verdict(
    event: Located,
    splits: Mapping[str, list[np.datetime64]],
    panel: PricePanel,
    options: EventOptions,
) -> LedgerEntry | None:
    dates = splits.get(event.security, [])
    first = max(event.position + options.estimation.start, 0)
    last = min(event.position + options.span.end, len(panel.sessions) - 1)
    inside = [day for day in dates if panel.sessions[first] <= day <= panel.sessions[last]]
    if not inside:
        return None
    return LedgerEntry(
        event.deal,
        "suspected_split",
        Action.DROPPED,
        ", ".join(map(str, inside)),
        "no whole-factor jump",
    )


def _estimation_verdict(
    event: Located,
    abnormal: AbnormalReturns,
    row: int,
    panel: PricePanel,
    options: EventOptions,
) -> LedgerEntry | None:
    deal = event.deal
    observations = int(abnormal.observations[row])
    if observations < options.minimum_observations:
        return LedgerEntry(
            deal,
            "short_estimation",
            Action.DROPPED,
            f"{observations} returns",
            f"{options.minimum_observations} returns",
        )
    if not np.isfinite(abnormal.residual_variance[row]):
        return LedgerEntry(
            deal, "benchmark_gap", Action.DROPPED, "no fit", "a benchmark that moves"
        )
    used = np.isfinite(abnormal.estimation_returns[row])
    at = event.position + np.arange(options.estimation.start, options.estimation.end + 1)
    raw = panel.returns[np.clip(at, 0, len(panel.sessions) - 1)[used], event.column]
    zero = float(np.mean(raw == 0))
    if zero > ZERO_RETURNS_FLAG:
        drop = zero > ZERO_RETURNS_DROP
        return LedgerEntry(
            deal,
            "thin_trading",
            Action.DROPPED if drop else Action.FLAGGED,
            f"{zero:.0%} unchanged prices",
            f"{ZERO_RETURNS_DROP if drop else ZERO_RETURNS_FLAG:.0%}",
        )
    return None


def screen_event(abnormal: AbnormalReturns, headline: Window) -> tuple[Booleans, StageLedger]:
    """Which events traded on every day of the headline window; flags on what follows it."""
    keep = abnormal.complete(headline)
    entries: list[LedgerEntry] = []
    traded = np.isfinite(abnormal.returns)
    realised = abnormal.returns + abnormal.expected
    for row, deal in enumerate(abnormal.deals):
        if not keep[row]:
            missing = int((~traded[row, abnormal.columns(headline)]).sum())
            entries.append(
                LedgerEntry(
                    deal,
                    "event_missing",
                    Action.DROPPED,
                    f"{missing} sessions without a return",
                    f"all of {headline.label}",
                )
            )
            continue
        last = int(np.flatnonzero(traded[row]).max())
        in_history = int(np.flatnonzero(~np.isnat(abnormal.days[row])).max())
        if last < in_history:
            day = abnormal.span.start + last
            entries.append(
                LedgerEntry(
                    deal,
                    "delisted",
                    Action.FLAGGED,
                    f"last return on day {day:+d}",
                    f"prices to day {abnormal.span.start + in_history:+d}",
                )
            )
        if np.nanmax(np.abs(realised[row])) > LARGE_RETURN:
            entries.append(
                LedgerEntry(
                    deal,
                    "large_return",
                    Action.FLAGGED,
                    f"{np.nanmax(np.abs(realised[row])):.0%}",
                    f"{LARGE_RETURN:.0%}",
                )
            )
    return keep, StageLedger("headline window", len(abnormal.deals), tuple(entries))


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
