"""Company-years, the decision to bid, the payment and the announcement effect of the deals."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from demo_market import Companies, Grid
from demo_params import (
    COMPANIES,
    EXCHANGES,
    FIRST_YEAR,
    INDUSTRIES,
    YEARS,
    BoolArray,
    FloatArray,
    IntArray,
    Parameters,
    bounded,
)
from demo_timing import Schedule

# Draws are made for every company, year and slot (first or second deal of the year), so that
# the choice of deals changes no other draw.
SLOTS = (COMPANIES, YEARS, 2)


@dataclass(frozen=True, slots=True)
class CompanyYears:
    """Arrays (300, 10) over companies and years; `value` in millions of USD.

    `overvaluation` and `signal` are hidden: they are never written to a file. `as_of` is the
    session position, on the company's own venue, of the first session of the year; `run_up` the
    simple return over the 42 sessions before it.
    """

    as_of: IntArray
    value: FloatArray
    leverage: FloatArray
    cash: FloatArray
    run_up: FloatArray
    divisions: IntArray
    overvaluation: FloatArray
    signal: FloatArray


@dataclass(frozen=True, slots=True)
class Terms:
    """Terms of the deals (n,): money in millions of local currency, `treasury` in percent."""

    deal_value: FloatArray
    market_value: FloatArray
    treasury: FloatArray
    placement: BoolArray
    listed: BoolArray
    cross_border: BoolArray
    withdrawn: BoolArray


def draw_company_years(
    params: Parameters,
    grid: Grid,
    companies: Companies,
    closes: FloatArray,
    rngs: dict[str, np.random.Generator],
) -> CompanyYears:
    """Characteristics of each company-year, observed and hidden.

    `closes` (300, T) are prices before any announcement effect, so nothing here depends on how
    earlier deals were paid for. Raises nothing.
    """
    rng, shape, venue = rngs["company_years"], (COMPANIES, YEARS), companies.exchange[:, None]
    first = [
        [int(grid.in_year(e, FIRST_YEAR + y)[0]) for y in range(YEARS)]
        for e in range(len(EXCHANGES))
    ]
    as_of, rows = np.array(first)[companies.exchange], np.arange(COMPANIES)[:, None]
    last = closes[rows, grid.sessions[venue, as_of - 1]]
    earlier = closes[rows, grid.sessions[venue, as_of - 1 - params.run_up_sessions]]
    rate = np.array([e.usd_rate for e in EXCHANGES])[venue]
    leverage = companies.leverage[:, None] + 0.06 * rng.standard_normal(shape)
    cash = companies.cash[:, None] + 0.04 * rng.standard_normal(shape)
    niches = len(INDUSTRIES) * params.niches_per_industry
    divisions = rng.poisson(rng.gamma(2.0, params.divisions_rate / 2.0, (niches, YEARS)))
    return CompanyYears(
        as_of=as_of,
        value=np.round(companies.shares[:, None] * last * rate, 2),
        leverage=np.round(bounded(leverage, 0.02, 0.85), 4),
        cash=np.round(bounded(cash, 0.005, 0.50), 4),
        run_up=last / earlier - 1.0,
        divisions=divisions[companies.niche],
        overvaluation=rng.standard_normal(shape),
        signal=rngs["selection"].standard_normal(shape),
    )


def decide_bids(params: Parameters, years: CompanyYears) -> BoolArray:
    """Which company-years (300, 10) announce: a probit whose error is the hidden signal.

    The threshold crossing is the selection equation of Heckman (1979). Raises nothing.
    """
    index = (
        params.announce_const
        + params.announce_size * np.log(years.value / params.market_value_median_usd)
        + params.announce_leverage * years.leverage
        + params.announce_cash * years.cash
        + params.announce_run_up * years.run_up
        + params.announce_divisions * years.divisions
    )
    return np.asarray(index + years.signal > 0.0)


def draw_terms(
    params: Parameters,
    grid: Grid,
    companies: Companies,
    closes: FloatArray,
    plan: Schedule,
    rng: np.random.Generator,
) -> Terms:
    """Size, instruments and descriptive terms of the deals (n,).

    Market value is taken from `closes` (300, T) 43 sessions before the event, ahead of any
    run-up to the announcement. Raises nothing.
    """
    i, y, slot = plan.company, plan.year, plan.second.astype(np.int64)
    spread = params.relative_size_log_sd * rng.standard_normal(SLOTS)
    size = bounded(
        params.relative_size_median * np.exp(spread[i, y, slot]),
        params.relative_size_low,
        params.relative_size_high,
    )
    held = rng.uniform(params.treasury_low, params.treasury_high, (COMPANIES, YEARS))
    has_treasury = rng.random((COMPANIES, YEARS)) < params.treasury_share
    listed, cross_border, withdrawn = (rng.random(SLOTS)[i, y, slot] for _ in range(3))
    venue = companies.exchange[i]
    before = grid.sessions[venue, plan.event - 1 - params.run_up_sessions]
    market_value = np.round(companies.shares[i] * closes[i, before], 1)
    rule_year = np.array([e.rule_year for e in EXCHANGES])[venue]
    return Terms(
        deal_value=np.round(size * market_value, 2),
        market_value=market_value,
        treasury=np.where(has_treasury, np.round(held, 1), 0.0)[i, y],
        placement=companies.eligible[i] & (y + FIRST_YEAR >= rule_year),
        listed=listed < params.listed_share,
        cross_border=cross_border < params.cross_border_share,
        withdrawn=(withdrawn < params.withdrawn_share) & (plan.role == 0),
    )


def choose_payment(
    params: Parameters,
    years: CompanyYears,
    plan: Schedule,
    terms: Terms,
    rng: np.random.Generator,
) -> BoolArray:
    """Which deals (n,) are paid in shares: a probit on overvaluation, size and instruments.

    The two instruments (treasury shares, placement rule) enter nothing else. Raises nothing.
    """
    i, y, slot = plan.company, plan.year, plan.second.astype(np.int64)
    index = (
        params.pay_const
        + params.pay_overvaluation * years.overvaluation[i, y]
        + params.pay_relative_size * np.log(terms.deal_value / terms.market_value)
        + params.pay_treasury * terms.treasury
        + params.pay_placement * terms.placement
    )
    return np.asarray(index + rng.standard_normal(SLOTS)[i, y, slot] > 0.0)


def announcement_effects(
    params: Parameters,
    companies: Companies,
    years: CompanyYears,
    plan: Schedule,
    terms: Terms,
    in_shares: BoolArray,
    rng: np.random.Generator,
) -> FloatArray:
    """Total effect (n,) over sessions -1 to +1, decimals, including event-induced noise.

    Noise is scaled so that idiosyncratic variance over the three sessions grows by a factor
    drawn per deal between `event_variance_low` and `event_variance_high`. Raises nothing.
    """
    i, y, slot = plan.company, plan.year, plan.second.astype(np.int64)
    ratio = rng.uniform(params.event_variance_low, params.event_variance_high, SLOTS)[i, y, slot]
    noise = companies.noise_sd[i] * np.sqrt(3.0 * (ratio - 1.0))
    effect = (
        params.effect_const
        + params.effect_shares * in_shares
        + params.effect_overvaluation * years.overvaluation[i, y]
        + params.effect_signal * years.signal[i, y]
        + params.effect_relative_size * np.log(terms.deal_value / terms.market_value)
        + params.effect_leverage * years.leverage[i, y]
        + params.effect_target_listed * terms.listed
        + noise * rng.standard_normal(SLOTS)[i, y, slot]
    )
    return np.round(effect, 8)
