"""Peers: whom a company's return is compared with beside the market, event by event."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from pipeline.core.ledger import Action, LedgerEntry, StageLedger
from pipeline.core.prices import Booleans, Floats, Integers, PricePanel
from pipeline.core.window import Window
from pipeline.returns.events import code_column


@dataclass(frozen=True, slots=True, eq=False)
class PeerBook:
    """Who is whose peer, and who is left out of one event's peers.

    Attributes:
        peers: security -> its peers; the company itself may be among them and never counts.
        events: (security, session) of every deal that could be placed, by exchange.
        counterparty: (security, session of day zero) -> the other company of that deal.
        window: sessions around an event in which no peer may have a deal of its own.
        fewest: peers an event must have.
    """

    peers: Mapping[str, frozenset[str]]
    events: Mapping[str, tuple[tuple[str, int], ...]] = field(default_factory=dict)
    counterparty: Mapping[tuple[str, int], str] = field(default_factory=dict)
    window: Window = field(default_factory=lambda: Window(0, 0))
    fewest: int = 1


def everyone(panel: PricePanel) -> PeerBook:
    """Every other company of the panel, deals or not."""
    together = frozenset(panel.securities)
    return PeerBook(dict.fromkeys(panel.securities, together))


def by_group(*tables: pd.DataFrame | None, column: str) -> dict[str, frozenset[str]]:
    """Companies with the same word in ``column`` are peers; the first table that names one wins.

    A company on several rows has the group of its last one; an empty word is no group.
    """
    group: dict[str, str] = {}
    for table in tables:
        if table is not None and column in table:
            rows = table.sort_values("as_of", kind="stable") if "as_of" in table else table
            named = rows[rows[column].astype(str) != ""]
            codes = named[code_column(named)].astype(str)
            own = dict(zip(codes, named[column].astype(str), strict=True))
            group = {**own, **group}
    members: dict[str, set[str]] = {}
    for security, word in group.items():
        members.setdefault(word, set()).add(security)
    shared = {word: frozenset(codes) for word, codes in members.items()}
    return {security: shared[word] for security, word in group.items()}


def by_pair(pairs: pd.DataFrame) -> dict[str, frozenset[str]]:
    """Peers as a table of ``security`` and ``peer`` names them."""
    grouped = pairs.groupby("security", sort=True)["peer"]
    return {str(security): frozenset(map(str, peers)) for security, peers in grouped}


def peer_book(
    peers: Mapping[str, frozenset[str]], located: pd.DataFrame, window: Window, fewest: int
) -> PeerBook:
    """The book of a sample.

    ``located`` holds security (or the line measured on), exchange, position, and counterparty if
    any is known.
    """
    code = code_column(located)
    events = {
        str(exchange): tuple(zip(own[code].astype(str), own["position"].astype(int), strict=True))
        for exchange, own in located.groupby("exchange", sort=True)
    }
    other = {}
    if "counterparty" in located:
        named = located[located["counterparty"].astype(str) != ""]
        key = zip(named[code].astype(str), named["position"].astype(int), strict=True)
        other = dict(zip(key, named["counterparty"].astype(str), strict=True))
    return PeerBook(peers, events, other, window, fewest)


class PeerReturns:
    """The equal-weighted return of an event's peers, on the sessions asked for.

    The same companies make up the estimation and the event window of one event.
    """

    def __init__(self, panel: PricePanel, book: PeerBook):
        """Lay the book on the panel's columns."""
        self.panel, self.book = panel, book
        self.column = {code: at for at, code in enumerate(panel.securities)}
        dated = [e for e in book.events.get(panel.exchange, ()) if e[0] in self.column]
        self.busy_column = np.array([self.column[code] for code, _ in dated], dtype=np.int64)
        self.busy_session = np.array([session for _, session in dated], dtype=np.int64)
        self.sums: dict[frozenset[str], tuple[Floats, Floats, Booleans]] = {}

    def __call__(self, column: Integers, position: Integers, at: Integers) -> Floats:
        """(n, L) peer returns of n events on sessions ``at`` (n, L).

        NaN where no peer has a return, and throughout for an event with too few peers.
        """
        found = np.full(at.shape, np.nan)
        returns = self.panel.returns
        for row, (own, session) in enumerate(zip(column.tolist(), position.tolist(), strict=True)):
            total, count, member = self._sums(own)
            out = self._left_out(own, session, member)
            if member.sum() - len(out) < self.book.fewest:
                continue
            theirs = returns[np.ix_(at[row], out)]
            known = np.isfinite(theirs)
            left = count[at[row]] - known.sum(axis=1)
            rest = total[at[row]] - np.where(known, theirs, 0.0).sum(axis=1)
            found[row] = np.where(left > 0, rest / np.maximum(left, 1), np.nan)
        return found

    def enough(self, column: Integers, position: Integers) -> Integers:
        """(n,) peers that each event has."""
        counts = []
        for own, session in zip(column.tolist(), position.tolist(), strict=True):
            member = self._sums(own)[2]
            counts.append(int(member.sum()) - len(self._left_out(own, session, member)))
        return np.array(counts, dtype=np.int64)

    def _sums(self, own: int) -> tuple[Floats, Floats, Booleans]:
        """(T,) sum and number of the returns of a company's whole group, and (S,) who is in it."""
        group = self.book.peers.get(self.panel.securities[own], frozenset())
        if group not in self.sums:
            member = np.array([code in group for code in self.panel.securities], dtype=np.bool_)
            returns = self.panel.returns[:, member]
            known = np.isfinite(returns)
            total = np.where(known, returns, 0.0).sum(axis=1)
            self.sums[group] = total, known.sum(axis=1).astype(np.float64), member
        return self.sums[group]

    def _left_out(self, own: int, session: int, member: Booleans) -> Integers:
        """Columns of the group that do not count for this event, each once."""
        distance = self.busy_session - session
        window = self.book.window
        near = self.busy_column[(distance >= window.start) & (distance <= window.end)]
        other = self.book.counterparty.get((self.panel.securities[own], session), "")
        out = {own, *near.tolist(), self.column.get(other, own)}
        return np.array(sorted(at for at in out if member[at]), dtype=np.int64)


def few_peers(
    located: pd.DataFrame, panels: Mapping[str, PricePanel], book: PeerBook, action: Action
) -> tuple[Booleans, StageLedger]:
    """Which events have enough peers; the others are dropped or flagged in the stage's ledger."""
    counts = np.zeros(len(located), dtype=np.int64)
    exchanges = located["exchange"].to_numpy()
    for exchange in np.unique(exchanges):
        here = np.flatnonzero(exchanges == exchange)
        own = located.iloc[here]
        returns = PeerReturns(panels[str(exchange)], book)
        counts[here] = returns.enough(own["column"].to_numpy(), own["position"].to_numpy())
    enough = counts >= book.fewest
    entries = tuple(_entries(located["deal_id"][~enough], counts[~enough], book.fewest, action))
    keep = enough if action is Action.DROPPED else np.ones(len(located), dtype=np.bool_)
    return keep, StageLedger("peers", len(located), entries)


def _entries(
    deals: Iterable[str], counts: Integers, fewest: int, action: Action
) -> Iterable[LedgerEntry]:
    for deal, count in zip(deals, counts.tolist(), strict=True):
        yield LedgerEntry(str(deal), "few_peers", action, f"{count} peers", f"{fewest} peers")
