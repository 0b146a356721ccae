"""Tables whose money and prices are made ones of a common currency."""

from __future__ import annotations

from dataclasses import replace

from pipeline.core.findings import Finding, raise_errors
from pipeline.inputs.read import Tables
from pipeline.returns.currency import money_on, quotation, rates_of
from pipeline.returns.panel import InOneCurrency
from pipeline.study.plan_prices import MONEY
from pipeline.study.schema import Study


def in_common(study: Study, tables: Tables) -> tuple[Tables, InOneCurrency | None]:
    """The tables with the money of candidates and benchmarks converted, and what converts prices.

    Without a common currency both are left as they are.

    Raises:
        InputProblem: for a price without a currency, or money without a rate.
    """
    if not study.currency.common:
        return tables, None
    rates = rates_of(study.currency.common, tables.rates)
    series = study.series
    quoted, found = quotation(
        tables.prices, tables.benchmarks, series.prices.currency, series.benchmarks.currency
    )
    raise_errors(found)
    benchmarks, candidates = tables.benchmarks, tables.candidates
    lost: list[Finding] = []
    if benchmarks["market_value"].notna().any():
        named = benchmarks.assign(currency=benchmarks["exchange"].map(quoted.benchmarks))
        days = named["date"].to_numpy().astype("datetime64[D]")
        converted, more = money_on(named, days, rates, ["market_value"], "benchmarks")
        benchmarks = benchmarks.assign(market_value=converted["market_value"])
        lost += more
    if candidates is not None and "currency" in candidates:
        days = candidates["as_of"].to_numpy().astype("datetime64[D]")
        candidates, more = money_on(candidates, days, rates, MONEY, "candidates")
        lost += more
    raise_errors(lost)
    changed = replace(tables, benchmarks=benchmarks, candidates=candidates)
    return changed, InOneCurrency(rates, quoted)
