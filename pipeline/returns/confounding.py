"""Other news of the company near the announcement: flagged, left out, or taken out day by day."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.ledger import Action, LedgerEntry, StageLedger
from pipeline.core.prices import Booleans, PricePanel
from pipeline.core.window import Window
from pipeline.returns.events import EventOptions

EARNINGS = "earnings release"
RULES = {True: "confounded", False: "other_news"}


@dataclass(frozen=True, slots=True, eq=False)
class NewsDays:
    """Sessions with other news of a deal's company.

    Attributes:
        deal: index labels of the deals, one an item of news.
        distance: sessions from day zero to the news, on the deal's exchange; news of a day
            without trading counts for the session after it.
        kind: words for it.
    """

    deal: np.ndarray
    distance: np.ndarray
    kind: tuple[str, ...]

    def mask(self, deals: pd.DataFrame, window: Window) -> Booleans:
        """(N, L) the sessions of ``window`` with news, day zero apart."""
        row = {label: at for at, label in enumerate(deals.index)}
        masked = np.zeros((len(deals), len(window)), dtype=np.bool_)
        inside = (window.start <= self.distance) & (self.distance <= window.end)
        for label, gap in zip(self.deal[inside], self.distance[inside], strict=True):
            if gap and label in row:
                masked[row[label], gap - window.start] = True
        return masked


def news_days(
    located: pd.DataFrame, panels: Mapping[str, PricePanel], news: pd.DataFrame | None
) -> NewsDays:
    """The other news of each deal's company, counted in sessions from day zero.

    Args:
        located: security, exchange, position and earnings_release, a date or NaT.
        panels: exchange -> prices.
        news: security, date, kind; or None.
    """
    own = located.reset_index(names="_deal")
    parts = [_earnings(own)]
    if news is not None:
        places = own[["_deal", "security", "exchange", "position"]]
        parts.append(places.merge(news[["security", "date", "kind"]], on="security"))
    listed = pd.concat(parts, ignore_index=True)
    listed = listed[listed["date"].notna()]
    at = np.zeros(len(listed), dtype=np.int64)
    days = listed["date"].to_numpy().astype("datetime64[D]")
    for exchange, panel in panels.items():
        here = (listed["exchange"] == exchange).to_numpy()
        at[here] = np.searchsorted(panel.sessions, days[here])
    distance = at - listed["position"].to_numpy(dtype=np.int64)
    return NewsDays(listed["_deal"].to_numpy(), distance, tuple(listed["kind"].astype(str)))


def _earnings(own: pd.DataFrame) -> pd.DataFrame:
    named = own[["_deal", "security", "exchange", "position", "earnings_release"]]
    return named.rename(columns={"earnings_release": "date"}).assign(kind=EARNINGS)


def treat_news(
    located: pd.DataFrame, at_zero: StageLedger, found: NewsDays, options: EventOptions
) -> tuple[pd.DataFrame, StageLedger]:
    """Flag, drop or mark the deals with other news within ``options.confounding_days``.

    Under ``flag`` they are kept. Under ``exclude`` they leave. Under ``dummy`` the news sessions
    are left out, each by a dummy of its own (their abnormal returns enter neither CAR nor
    estimation), and only a deal with news on day zero itself leaves: no dummy can part the two.

    Returns:
        The deals kept, and the stage ``at_zero`` with its further entries.
    """
    near: dict[int, dict[str, list[tuple[int, str]]]] = {}
    for label, gap, kind in zip(found.deal, found.distance, found.kind, strict=True):
        if abs(gap) <= options.confounding_days:
            rules = near.setdefault(int(label), {})
            rules.setdefault(RULES[kind == EARNINGS], []).append((int(gap), kind))
    entries: list[LedgerEntry] = []
    gone: list[int] = []
    for label in located.index[located.index.isin(list(near))]:
        told = near[label]
        alone = any(gap == 0 for news in told.values() for gap, _ in news)
        leaves = options.confounding == "exclude" or (options.confounding == "dummy" and alone)
        gone += [label] if leaves else []
        deal = str(located.at[label, "deal_id"])
        entries += _told(deal, told, leaves, options)
    kept = located.drop(index=gone)
    return kept, StageLedger(at_zero.stage, at_zero.rows_in, at_zero.entries + tuple(entries))


def _told(
    deal: str, told: Mapping[str, list[tuple[int, str]]], leaves: bool, options: EventOptions
) -> list[LedgerEntry]:
    """One entry a rule, and one alone that drops the deal."""
    entries: list[LedgerEntry] = []
    action = Action.CHANGED if options.confounding == "dummy" else Action.FLAGGED
    for rule, news in told.items():
        gaps = sorted(set(news))
        words = [f"{gap:+d} sessions" + (f" ({k})" if k != EARNINGS else "") for gap, k in gaps]
        done = Action.DROPPED if leaves and not entries else action
        limit = f"{options.confounding_days} sessions"
        entries.append(LedgerEntry(deal, rule, done, ", ".join(words), limit))
    return entries


def without_news(abnormal: AbnormalReturns, masked: Booleans) -> AbnormalReturns:
    """The abnormal returns with the sessions ``masked`` (N, D) left out, each by its own dummy.

    The dummy takes up the session's whole abnormal return (Karafiath 1988, Financial Review 23),
    so it adds nothing to the CAR nor to its variance.
    """
    if not masked.any():
        return abnormal
    left_out = masked & np.isfinite(abnormal.returns)
    returns = np.where(left_out, np.nan, abnormal.returns)
    return replace(abnormal, returns=returns, left_out=left_out)
