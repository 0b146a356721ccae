"""Which listing, which session, which events: the deals on their way to the abnormal returns."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import pandas as pd

from pipeline.core.findings import raise_errors
from pipeline.core.ledger import StageLedger
from pipeline.core.prices import PricePanel
from pipeline.inputs.read import Tables
from pipeline.returns.confounding import NewsDays, news_days, treat_news
from pipeline.returns.currency import Rates, money_before
from pipeline.returns.events import EventOptions, locate, masked_sessions
from pipeline.returns.halts import past_halts
from pipeline.returns.listings import (
    Choice,
    choose_lines,
    line_entries,
    on_lines,
    on_second_lines,
)
from pipeline.returns.repeats import settle_repeats
from pipeline.returns.rumours import dated, has_rumours, moved, rumour_entries
from pipeline.returns.sessions import Sessions
from pipeline.study.plan_prices import MONEY


@dataclass(frozen=True, slots=True)
class Placed:
    """The deals in their panels.

    Attributes:
        tables: the tables, candidates on the listing chosen.
        located: every deal that could be placed.
        first: those of them that are events of their own.
        stages: day zero, and repeated deals.
        news: the sessions with other news.
        by_other_date: the deals whose rumour and announcement have different day zeros, as
            placed by the date that the study does not take; None without one.
        on_second_lines: the deals whose company has a second listing, placed there; None unless
            the study asks for it.
    """

    tables: Tables
    located: Any
    first: Any
    stages: tuple[StageLedger, StageLedger]
    news: NewsDays
    by_other_date: Any = None
    on_second_lines: Any = None


def place_deals(
    tables: Tables,
    panels: Mapping[str, PricePanel],
    calendars: Mapping[str, Sessions],
    options: EventOptions,
    second_lines: bool,
    rates: Rates | None = None,
) -> Placed:
    """Listing, day zero, halts, money, other news and repeated deals, in this order."""

    def put(rows: Any) -> tuple[Any, StageLedger]:
        return past_halts(*locate(rows, panels, calendars, options), panels, calendars, options)

    tables, deals, choices = _on_lines(tables, panels, options)
    located, at_zero = put(dated(deals, options.earliest))
    kept = set(located["deal_id"].astype(str))
    entries = [entry for entry in line_entries(deals, choices) if entry.deal in kept]
    other, second = None, None
    if has_rumours(deals):
        away, _ = put(dated(deals, not options.earliest))
        other = moved(located, away)
        entries += rumour_entries(other, options.earliest)
    if second_lines:
        second, _ = put(on_second_lines(dated(deals, options.earliest), choices))
    if rates is not None:
        located, converted, lost = money_before(located, panels, rates, MONEY, options.headline)
        raise_errors(lost)
        entries += converted
    at_zero = StageLedger(at_zero.stage, at_zero.rows_in, (*at_zero.entries, *entries))
    news = news_days(located, panels, tables.news)
    clear, at_zero = treat_news(located, at_zero, news, options)
    first, repeats = settle_repeats(clear, options.headline, options.repeats)
    return Placed(tables, located, first, (at_zero, repeats), news, other, second)


def _on_lines(
    tables: Tables, panels: Mapping[str, PricePanel], options: EventOptions
) -> tuple[Tables, Any, Mapping[str, Choice]]:
    """Deals and candidates on the listings the rule chooses; as they are without such a table."""
    deals, candidates = tables.deals, tables.candidates
    if tables.lines is None:
        return tables, deals, {}
    companies, dates = deals["security"], deals["announced_date"]
    if candidates is not None:
        others = candidates[~candidates["security"].isin(companies)]
        companies = pd.concat([companies, others["security"]], ignore_index=True)
        dates = pd.concat([dates, others["as_of"]], ignore_index=True)
    choices = choose_lines(companies, dates, tables.lines, panels, options.estimation)
    if candidates is not None:
        candidates = on_lines(candidates, choices)
    return replace(tables, candidates=candidates), on_lines(deals, choices), choices


def unused_sessions(
    deals: Any,
    located: Any,
    options: EventOptions,
    news: NewsDays,
    panels: Mapping[str, PricePanel],
) -> Any:
    """(N, E) estimation sessions of ``deals`` that are not used: other deals, other news.

    ``located`` are all deals of their companies, each on the sessions of its own exchange.
    """
    masked = masked_sessions(deals, located, options.estimation, options.mask_sessions, panels)
    if options.confounding == "dummy":
        masked |= news.mask(deals, options.estimation)
    return masked
