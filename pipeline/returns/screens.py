"""Which located events can be measured: screens of the estimation and the event window."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pandas as pd

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.findings import Finding, Severity, problem
from pipeline.core.ledger import Action, Ledger, LedgerEntry, StageLedger
from pipeline.core.prices import Booleans, PricePanel
from pipeline.core.window import Window
from pipeline.returns.events import EventOptions, Located, located_events
from pipeline.returns.panel import suspected_splits

# Shares of unchanged prices, of missing sessions, and a daily return to look at: common practice,
# no source.
ZERO_RETURNS_DROP = 0.5
ZERO_RETURNS_FLAG = 0.2
GAPS_FLAG = 0.05
LARGE_RETURN = 0.5


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
        if keep[row]:
            entries += _gaps(event, abnormal, row, masked)
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
    """Drop a deal whose estimation window holds a jump; one near the event is an error before."""
    inside = jumps_inside(event, splits, panel, options.estimation, options)
    if not inside:
        return None
    return LedgerEntry(
        event.deal,
        "suspected_split",
        Action.DROPPED,
        ", ".join(map(str, inside)),
        "no whole-factor jump",
    )


def jumps_inside(
    event: Located,
    splits: Mapping[str, list[np.datetime64]],
    panel: PricePanel,
    window: Window,
    options: EventOptions,
) -> list[np.datetime64]:
    """Suspected splits of the event's security in a window, unless declared to be real."""
    if event.deal in options.real_jumps:
        return []
    first = max(event.position + window.start, 0)
    last = min(event.position + window.end, len(panel.sessions) - 1)
    if last < first:
        return []
    dates = splits.get(event.security, [])
    return [day for day in dates if panel.sessions[first] <= day <= panel.sessions[last]]


def jumps_near_events(
    located: pd.DataFrame, panels: Mapping[str, PricePanel], options: EventOptions
) -> list[Finding]:
    """An error for each deal with a jump of a whole factor between estimation and the last day.

    Dropping such a deal would choose the sample by its outcome, keeping a real split would swamp
    the mean: the analyst must say which it is.
    """
    splits = {exchange: suspected_splits(panel) for exchange, panel in panels.items()}
    near = Window(options.estimation.end + 1, options.span.end)
    found = []
    for event in located_events(located):
        panel = panels[event.exchange]
        days = jumps_inside(event, splits[event.exchange], panel, near, options)
        if days:
            found.append(
                Finding(
                    "suspected_split",
                    Severity.ERROR,
                    "prices",
                    got=f"{event.security} moved by a whole factor on {', '.join(map(str, days))},"
                    f" in the windows of {event.deal}",
                    expected="closes adjusted for splits",
                    remedy="Adjust the closes; if the move is news, add the deal to "
                    "event_time.real_jumps.",
                    column="close",
                )
            )
    return found


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


def _gaps(
    event: Located, abnormal: AbnormalReturns, row: int, masked: Booleans
) -> list[LedgerEntry]:
    """A flag when many sessions of the estimation window have no return of their own accord."""
    sessions = int((~masked[row]).sum())
    missing = sessions - int(abnormal.observations[row])
    if missing <= GAPS_FLAG * sessions:
        return []
    value = f"{missing} of {sessions} sessions without a return"
    threshold = f"{GAPS_FLAG:.0%}"
    return [LedgerEntry(event.deal, "gaps_in_estimation", Action.FLAGGED, value, threshold)]


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


def refuse_empty(kept: int, ledger: Ledger) -> None:
    """Refuse to go on without a deal, naming the stage that lost most.

    Raises:
        InputProblem: ``no_deals_left`` if ``kept`` is zero.
    """
    if kept:
        return
    worst = max(ledger.stages, key=lambda stage: len(stage.dropped))
    raise problem(
        "no_deals_left",
        "deals",
        got=f"no deal left; {len(worst.dropped)} of {worst.rows_in} left at '{worst.stage}': "
        + ", ".join(sorted({e.rule.replace("_", " ") for e in worst.dropped})),
        expected="at least one deal with prices around its announcement",
        remedy="Compare the dates and codes of the deals with those of the prices.",
    )
