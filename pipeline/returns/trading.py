"""How a share traded around its deal: prices that stand still, and returns over gaps."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import replace

import numpy as np
import pandas as pd

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.findings import Finding, Severity
from pipeline.core.ledger import Action, LedgerEntry, StageLedger
from pipeline.core.prices import Floats, PricePanel
from pipeline.core.window import Window
from pipeline.returns.events import EventOptions, Located, located_events
from pipeline.returns.jumps import dates
from pipeline.returns.limits import ScreenLimits


def stood_still(
    event: Located, panel: PricePanel, window: Window, limits: ScreenLimits
) -> Iterator[LedgerEntry]:
    """Flags for one price over many sessions, and for sessions on which no share changed hands."""
    rows = _rows(event, window, panel)
    close, volume = panel.close[rows, event.column], panel.volume[rows, event.column]
    longest = _longest_run(close)
    if longest >= limits.stale_run:
        value, limit = f"one price for {longest} sessions", f"{limits.stale_run} sessions"
        yield LedgerEntry(event.deal, "stale_price", Action.FLAGGED, value, limit)
    known = np.isfinite(volume)
    idle = float(np.mean(volume[known] == 0)) if known.any() else 0.0
    if idle > limits.no_trade_flag:
        value, limit = f"{idle:.0%} of sessions without a trade", f"{limits.no_trade_flag:.0%}"
        yield LedgerEntry(event.deal, "no_trades", Action.FLAGGED, value, limit)


def _rows(event: Located, window: Window, panel: PricePanel) -> slice:
    last = min(event.position + window.end + 1, len(panel.sessions))
    return slice(max(event.position + window.start, 0), max(last, 0))


def _longest_run(close: Floats) -> int:
    """The longest run of one and the same close on neighbouring sessions."""
    if not len(close):
        return 0
    breaks = np.flatnonzero(close[1:] != close[:-1]) + 1
    return int(np.diff(np.concatenate([[0], breaks, [len(close)]])).max())


def covered(event: Located, panel: PricePanel, options: EventOptions) -> list[LedgerEntry]:
    """What the policy for missing prices did to the deal's returns, if it did anything."""
    rows = _rows(event, Window(options.estimation.start, options.span.end), panel)
    close = panel.close[rows, event.column]
    if panel.spans is not None:
        spans = panel.spans[rows, event.column]
        longer = (spans > 1) & np.isfinite(panel.returns[rows, event.column])
        value = f"{longer.sum()} returns over several sessions, the longest over {spans.max()}"
        rule = "longer_returns"
    else:
        longer = np.isnan(close) & (panel.returns[rows, event.column] == 0)
        value, rule = f"{longer.sum()} sessions without a price, taken as zero", "lumped_returns"
    if not longer.any():
        return []
    return [LedgerEntry(event.deal, rule, Action.CHANGED, value, "a price on every session")]


def lacking_prices(at_zero: StageLedger, limits: ScreenLimits) -> list[Finding]:
    """An error if many deals left at day zero because their security has no prices at all."""
    lacking = [entry for entry in at_zero.dropped if entry.rule == "no_prices"]
    share = len(lacking) / at_zero.rows_in if at_zero.rows_in else 0.0
    if share <= limits.without_prices:
        return []
    return [
        Finding(
            "many_without_prices",
            Severity.ERROR,
            "prices",
            got=f"no price of {', '.join(sorted({entry.value for entry in lacking})[:4])}: "
            f"{len(lacking)} of {at_zero.rows_in} deals",
            expected=f"prices for all but {limits.without_prices:.0%} of the deals",
            remedy="Compare the codes of the two tables, or complete the prices.",
            column="security",
        )
    ]


def benchmark_in_windows(
    located: pd.DataFrame, panels: Mapping[str, PricePanel], headline: Window
) -> list[Finding]:
    """An error where the benchmark's series has a hole in the headline window of a deal."""
    holes: dict[str, set[np.datetime64]] = {}
    for event in located_events(located):
        panel = panels[event.exchange]
        known = np.flatnonzero(np.isfinite(panel.benchmark))
        rows = np.arange(event.position + headline.start, event.position + headline.end + 1)
        inside = rows[(rows >= known[0]) & (rows <= known[-1])] if known.size else rows[:0]
        missing = inside[np.isnan(panel.benchmark[inside])]
        if missing.size:
            holes.setdefault(event.exchange, set()).update(panel.sessions[missing])
    return [
        Finding(
            "benchmark_gap",
            Severity.ERROR,
            "benchmarks",
            got=f"{exchange}: no return in the headline window of a deal on {dates(days)}",
            expected="a level on every session of the headline windows, and on the one before",
            remedy="Complete the benchmark.",
            column="close",
        )
        for exchange, days in holes.items()
    ]


def too_few_under(
    abnormal: Mapping[str, AbnormalReturns], lead: str, minimum: int
) -> tuple[dict[str, AbnormalReturns], list[LedgerEntry]]:
    """The models beside the headline's, without the deals that have too few returns for them.

    Such a deal keeps its place, with no abnormal return under that model, and is flagged.
    """
    kept: dict[str, AbnormalReturns] = {}
    entries: list[LedgerEntry] = []
    for key, item in abnormal.items():
        short = item.observations < minimum
        if key == lead or not short.any():
            kept[key] = item
            continue
        kept[key] = replace(item, returns=np.where(short[:, None], np.nan, item.returns))
        words = key.replace("_", " ")
        entries += [
            LedgerEntry(
                item.deals[row],
                "short_under_model",
                Action.FLAGGED,
                f"{item.observations[row]} returns under the {words}",
                f"{minimum} returns",
            )
            for row in np.flatnonzero(short).tolist()
        ]
    return kept, entries
