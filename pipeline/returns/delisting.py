"""What the holders of a share got when it left its exchange."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd

from pipeline.core.findings import Finding, Severity
from pipeline.core.ledger import Action, LedgerEntry
from pipeline.core.prices import PricePanel
from pipeline.core.window import Window
from pipeline.returns.policies import Panels

PERFORMANCE = "performance"
# Mean returns of delistings for performance: Shumway 1997, JF 52 (New York and American exchange);
# Shumway and Warther 1999, JF 54 (Nasdaq).
PUBLISHED = {"XNYS": -0.30, "XASE": -0.30, "XNAS": -0.55}


@dataclass(frozen=True, slots=True)
class Delisting:
    """The return with which one security left, where it came from, and the session it is on."""

    security: str
    session: np.datetime64
    value: float
    source: str


@dataclass(frozen=True, slots=True)
class Delisted:
    """Panels that hold the delisting returns, those returns, and what is doubtful about them."""

    panels: Panels
    returns: Mapping[str, Delisting]
    findings: tuple[Finding, ...] = ()


def with_delistings(panels: Panels, table: pd.DataFrame | None, policy: str) -> Delisted:
    """Put the return of each delisting after the last close, or into the last session.

    The return belongs to the session after the last close; where the delisting is dated on or
    before that close, it is compounded with the last session's return instead. Nothing is placed
    beyond the panel's end.

    Args:
        panels: exchange -> prices.
        table: security, date, return (NaN if not known), reason; None without one.
        policy: ``drop`` uses none; ``supplied`` those of the table; ``shumway`` besides, for a
            delisting for performance without a return, the published mean of its exchange.
    """
    if table is None or policy == "drop":
        return Delisted(panels, {})
    changed: dict[str, PricePanel] = {}
    found: dict[str, Delisting] = {}
    findings: list[Finding] = []
    for exchange, panel in panels.items():
        own = table[table["security"].isin(panel.securities)]
        changed[exchange], made, traded = _on(panel, own, policy)
        found |= {item.security: item for item in made}
        findings += _traded_on(traded)
    return Delisted(changed, found, tuple(findings))


def _on(
    panel: PricePanel, table: pd.DataFrame, policy: str
) -> tuple[PricePanel, list[Delisting], list[str]]:
    """The panel with its delisting returns, the returns, and securities that traded on after."""
    close = panel.close.copy(order="F")
    returns = panel.returns.copy(order="F")
    delisted = np.full(len(panel.securities), -1, dtype=np.int64)
    made: list[Delisting] = []
    traded: list[str] = []
    names = ["security", "date", "return", "reason"]
    for security, date, value, reason in table[names].itertuples(index=False):
        column = panel.column(security)
        quoted = np.flatnonzero(np.isfinite(close[:, column]))
        taken, source = _value(value, reason, panel.exchange, policy)
        if not quoted.size or not np.isfinite(taken):
            continue
        last = int(quoted[-1])
        day = np.datetime64(date, "D")
        if (panel.sessions[quoted] > day).sum() > 1:
            traded.append(f"{security} after {day}")
            continue
        if day > panel.sessions[-1]:
            continue
        if day > panel.sessions[last] and last + 1 < len(close):
            row = last + 1
            close[row, column], returns[row, column] = close[last, column] * (1 + taken), taken
        else:
            row = last
            close[row, column] *= 1 + taken
            returns[row, column] = (1 + returns[row, column]) * (1 + taken) - 1
        delisted[column] = row
        made.append(Delisting(security, panel.sessions[row], taken, source))
    changed = replace(panel, close=close, returns=returns, delisted=delisted)
    return changed, made, traded


def _value(value: float, reason: str, exchange: str, policy: str) -> tuple[float, str]:
    """The return taken, NaN without one, and its source in words."""
    if np.isfinite(value):
        return float(value), "supplied"
    if policy == "shumway" and reason.strip().casefold() == PERFORMANCE:
        return PUBLISHED.get(exchange, float("nan")), "published mean of its exchange"
    return float("nan"), ""


def _traded_on(traded: list[str]) -> list[Finding]:
    if not traded:
        return []
    return [
        Finding(
            "traded_after_delisting",
            Severity.WARNING,
            "delistings",
            got=f"several closes of {', '.join(traded[:4])}"
            + (f" and {len(traded) - 4} more" if len(traded) > 4 else ""),
            expected="no trade after a delisting",
            remedy="Correct the date, or the code if it was given to another company; the "
            "delisting return is not used.",
            column="date",
        )
    ]


def delisting_entries(
    deals: pd.DataFrame, panels: Panels, returns: Mapping[str, Delisting], span: Window
) -> list[LedgerEntry]:
    """What was added to the returns of each deal on the event days ``span``.

    Args:
        deals: deal_id, exchange, column, position; one row a deal kept.
    """
    entries = []
    names = ["deal_id", "exchange", "column", "position"]
    for deal, exchange, column, position in deals[names].itertuples(index=False):
        panel = panels[exchange]
        item = returns.get(panel.securities[column])
        if item is None or panel.delisted is None:
            continue
        day = int(panel.delisted[column]) - int(position)
        if span.start <= day <= span.end:
            value = f"{item.value:+.1%} on day {day:+d}, {item.source}"
            entries.append(
                LedgerEntry(str(deal), "delisting_return", Action.CHANGED, value, "no return")
            )
    return entries
