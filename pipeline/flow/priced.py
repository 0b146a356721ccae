"""From the tables to the price panels of a study: one currency, delistings, missing prices."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.findings import Finding, raise_errors
from pipeline.core.ledger import StageLedger
from pipeline.core.prices import PricePanel
from pipeline.flow.money import in_common
from pipeline.inputs.read import Tables
from pipeline.returns.currency import Rates
from pipeline.returns.delisting import Delisting, delisting_entries, with_delistings
from pipeline.returns.events import EventOptions
from pipeline.returns.panel import build_panels
from pipeline.returns.policies import measured_on
from pipeline.returns.sessions import Sessions
from pipeline.returns.trading import too_few_under
from pipeline.study import plan, plan_prices
from pipeline.study.schema import Study


@dataclass(frozen=True, slots=True)
class Priced:
    """The price panels of a study.

    Attributes:
        tables: the tables, their money in the common currency if there is one, and no price rows.
        panels: exchange -> prices with simple returns that never span a gap.
        measured_on: the same with the kind of return and the policy for gaps that the study asks
            for: what abnormal returns are measured on.
        calendars: exchange -> its sessions.
        delistings: security -> the return it left with.
        findings: warnings.
        rates: of the common currency; None without one.
    """

    tables: Tables
    panels: Mapping[str, PricePanel]
    measured_on: Mapping[str, PricePanel]
    calendars: Mapping[str, Sessions]
    delistings: Mapping[str, Delisting]
    findings: list[Finding]
    rates: Rates | None


def price_panels(study: Study, tables: Tables) -> Priced:
    """Lay the tables on the sessions of their exchanges.

    Raises:
        InputProblem: with the errors of prices, benchmarks, calendars and rates.
    """
    tables, money = in_common(study, tables)
    panels, calendars, found = build_panels(
        tables.listings,
        tables.prices,
        tables.benchmarks,
        tables.factors,
        tables.factor_names,
        plan.calendar_changes(study),
        plan_prices.screen_limits(study),
        money,
        tables.spans,
    )
    raise_errors(found)
    time = study.event_time
    left = with_delistings(panels, tables.delistings, time.delisting)
    found += [*left.findings, *plan_prices.return_warnings(study)]
    on = measured_on(left.panels, time.missing, time.returns)
    rates = money.rates if money else None
    # The panels hold what the rows said; a market's rows take more memory than all that follows.
    tables = replace(tables, prices=tables.prices.iloc[:0].copy())
    return Priced(tables, left.panels, on, calendars, left.returns, found, rates)


def at_the_end(
    abnormal: Mapping[str, AbnormalReturns],
    lead: str,
    deals: Any,
    at_event: StageLedger,
    priced: Priced,
    options: EventOptions,
) -> tuple[dict[str, AbnormalReturns], StageLedger]:
    """The abnormal returns of the deals kept, with what is still to be said of them.

    Models beside the headline's go without the deals that have too few returns for them; the last
    stage gains a line for each delisting return inside a deal's days.
    """
    kept, short = too_few_under(abnormal, lead, options.minimum_observations)
    left = delisting_entries(deals, priced.panels, priced.delistings, options.span)
    return kept, replace(at_event, entries=(*at_event.entries, *short, *left))
