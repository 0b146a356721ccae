"""Expected-return models of a study, those with peers given the companies of each event."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from functools import partial
from typing import Any

from pipeline.core.ledger import Action, StageLedger
from pipeline.core.prices import PricePanel
from pipeline.inputs.read import Tables
from pipeline.registry import EXPECTED_RETURNS, entry
from pipeline.returns.peers import PeerBook, by_group, by_pair, few_peers, peer_book
from pipeline.study import plan
from pipeline.study.schema import Study

PEERS = "peers"


def models_of(study: Study, tables: Tables, located: Any) -> dict[str, Callable[..., Any]]:
    """Key -> function of a panel, of every expected-return model of the study."""
    book = _book(study, tables, located)
    return {
        key: partial(entry(EXPECTED_RETURNS, key).load(), book=book)
        if PEERS in entry(EXPECTED_RETURNS, key).needs
        else entry(EXPECTED_RETURNS, key).load()
        for key in study.expected_returns.all_models
    }


def screen_peers(
    study: Study, tables: Tables, located: Any, first: Any, panels: Mapping[str, PricePanel]
) -> tuple[Any, tuple[StageLedger, ...]]:
    """The deals with enough peers; without a model of peers all of them, and no stage."""
    book = _book(study, tables, located)
    if book is None:
        return first, ()
    headline = PEERS in entry(EXPECTED_RETURNS, study.expected_returns.headline).needs
    action = Action.DROPPED if headline else Action.FLAGGED
    keep, stage = few_peers(first, panels, book, action)
    return first[keep], (stage,)


def _book(study: Study, tables: Tables, located: Any) -> PeerBook | None:
    asked = study.expected_returns
    if not any(PEERS in entry(EXPECTED_RETURNS, key).needs for key in asked.all_models):
        return None
    if tables.peers is not None:
        peers = by_pair(tables.peers)
    else:
        peers = by_group(tables.candidates, located, column=asked.peers)
    return peer_book(peers, located, plan.span(study), asked.fewest_peers)
