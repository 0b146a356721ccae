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
from pipeline.returns.jumps import suspected_splits
from pipeline.returns.limits import DEFAULT_LIMITS, ScreenLimits
from pipeline.returns.trading import covered, stood_still


def screen_estimation(
    located: pd.DataFrame,
    abnormal: AbnormalReturns,
    panels: Mapping[str, PricePanel],
    masked: Booleans,
    options: EventOptions,
    limits: ScreenLimits = DEFAULT_LIMITS,
) -> tuple[Booleans, StageLedger]:
    """Which events have a usable estimation window, by the first rule each fails.

    The rules in order: suspected split, too few returns, no fit, too many zero returns. A deal
    that stays is flagged for a price that stood still, sessions without trade, and gaps.

    Args:
        located: N events.
        abnormal: theirs, under the headline model.
        panels: exchange -> the prices the returns were measured on.
        masked: (N, E) estimation sessions not used.
        options: windows and what is declared of events.
        limits: thresholds.
    """
    splits = {exchange: suspected_splits(panel, limits) for exchange, panel in panels.items()}
    entries: list[LedgerEntry] = []
    keep = np.ones(len(located), dtype=np.bool_)
    for row, event in enumerate(located_events(located)):
        panel = panels[event.exchange]
        verdict = _split_verdict(event, splits[event.exchange], panel, options) or (
            _estimation_verdict(event, abnormal, row, panel, options, limits)
        )
        if verdict is not None:
            entries.append(verdict)
            keep[row] = verdict.action is not Action.DROPPED
        if keep[row]:
            entries += _gaps(event, abnormal, row, masked, limits)
            entries += stood_still(event, panel, options.estimation, limits)
            entries += covered(event, panel, options)
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
    located: pd.DataFrame,
    panels: Mapping[str, PricePanel],
    options: EventOptions,
    limits: ScreenLimits = DEFAULT_LIMITS,
) -> list[Finding]:
    """An error for each deal with a jump of a whole factor between estimation and the last day.

    Dropping such a deal would choose the sample by its outcome, keeping a real split would swamp
    the mean: the analyst must say which it is.
    """
    splits = {exchange: suspected_splits(panel, limits) for exchange, panel in panels.items()}
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
    limits: ScreenLimits,
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
    if zero > limits.zero_returns_flag:
        drop = zero > limits.zero_returns_drop
        return LedgerEntry(
            deal,
            "thin_trading",
            Action.DROPPED if drop else Action.FLAGGED,
            f"{zero:.0%} unchanged prices",
            f"{limits.zero_returns_drop if drop else limits.zero_returns_flag:.0%}",
        )
    return None


def _gaps(
    event: Located, abnormal: AbnormalReturns, row: int, masked: Booleans, limits: ScreenLimits
) -> list[LedgerEntry]:
    """A flag when many sessions of the estimation window have no return of their own accord."""
    sessions = int((~masked[row]).sum())
    missing = sessions - int(abnormal.observations[row])
    if missing <= limits.gaps_flag * sessions:
        return []
    value = f"{missing} of {sessions} sessions without a return"
    threshold = f"{limits.gaps_flag:.0%}"
    return [LedgerEntry(event.deal, "gaps_in_estimation", Action.FLAGGED, value, threshold)]


def screen_event(
    abnormal: AbnormalReturns,
    headline: Window,
    located: pd.DataFrame,
    panels: Mapping[str, PricePanel],
    limits: ScreenLimits = DEFAULT_LIMITS,
) -> tuple[Booleans, StageLedger]:
    """Which events traded on every day of the headline window; flags on what follows it.

    Args:
        abnormal: N events, under the headline model.
        headline: the window declared before looking.
        located: the same events.
        panels: exchange -> prices, simple returns.
        limits: thresholds.
    """
    keep = abnormal.complete(headline)
    entries: list[LedgerEntry] = []
    for row, event in enumerate(located_events(located)):
        if not keep[row]:
            entries.append(_event_missing(abnormal, row, headline))
        else:
            panel = panels[event.exchange]
            entries += _ends_inside(event, panel, abnormal.span)
            entries += _large_return(event, panel, abnormal.span, limits.large_return)
    return keep, StageLedger("headline window", len(abnormal.deals), tuple(entries))


def _event_missing(abnormal: AbnormalReturns, row: int, headline: Window) -> LedgerEntry:
    missing = int((~np.isfinite(abnormal.returns[row, abnormal.columns(headline)])).sum())
    value = f"{missing} sessions without a return"
    deal, threshold = abnormal.deals[row], f"all of {headline.label}"
    return LedgerEntry(deal, "event_missing", Action.DROPPED, value, threshold)


def _ends_inside(event: Located, panel: PricePanel, span: Window) -> list[LedgerEntry]:
    """A flag when the security's prices end before the last of the days held, its listing's not."""
    quoted = np.flatnonzero(np.isfinite(panel.close[:, event.column]))
    last = int(quoted[-1]) - event.position
    history = len(panel.sessions) - 1 - event.position
    end = min(span.end, history)
    if last >= end:
        return []
    value, threshold = f"last price on day {last:+d}", f"prices to day {end:+d}"
    return [LedgerEntry(event.deal, "delisted", Action.FLAGGED, value, threshold)]


def _large_return(
    event: Located, panel: PricePanel, span: Window, limit: float
) -> list[LedgerEntry]:
    first = max(event.position + span.start, 0)
    moves = np.abs(panel.returns[first : event.position + span.end + 1, event.column])
    largest = float(np.fmax.reduce(moves))
    if not largest > limit:
        return []
    value, threshold = f"{largest:.0%}", f"{limit:.0%}"
    return [LedgerEntry(event.deal, "large_return", Action.FLAGGED, value, threshold)]


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
