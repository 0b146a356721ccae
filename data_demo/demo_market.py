"""Sessions, benchmark and factor returns, companies and their daily returns."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
import pandas_market_calendars as calendars
from demo_params import (
    COMPANIES,
    EXCHANGES,
    FIRST_DAY,
    FIRST_YEAR,
    INDUSTRIES,
    LAST_DAY,
    YEARS,
    BoolArray,
    DateArray,
    FloatArray,
    IntArray,
    Parameters,
    bounded,
)

# A close before 14:00 local time is a shortened session on all four venues of the demo.
EARLY_CLOSE_MINUTE = 14 * 60


@dataclass(frozen=True, slots=True)
class Grid:
    """Weekdays (T) shared by all venues (E) and which of them are sessions.

    `days` (T,) dates; `is_open` (E, T); `close_minute` (E, T) local minutes after midnight, -1
    without a session; `sessions` (E, S) index into `days` of each venue's k-th session, padded
    with -1; `counts` (E,) sessions per venue.
    """

    days: DateArray
    is_open: BoolArray
    close_minute: IntArray
    sessions: IntArray
    counts: IntArray

    def in_year(self, exchange: int, year: int) -> IntArray:
        """Session positions of one venue inside a calendar year, ascending; raises nothing."""
        own = self.days[self.sessions[exchange, : self.counts[exchange]]]
        return np.flatnonzero(own.astype("datetime64[Y]") == np.datetime64(f"{year}", "Y"))


@dataclass(frozen=True, slots=True)
class Factors:
    """Daily decimal returns: `benchmark` and `risk_free` (E, T), `style` (E, T, 3)."""

    benchmark: FloatArray
    risk_free: FloatArray
    style: FloatArray


@dataclass(frozen=True, slots=True)
class Companies:
    """One entry per company: codes of venue, industry and niche, return coefficients, sizes.

    `noise_sd` is a daily decimal, `price` in the venue's currency, `shares` in millions.
    """

    exchange: IntArray
    industry: IntArray
    niche: IntArray
    alpha: FloatArray
    beta: FloatArray
    loadings: FloatArray
    noise_sd: FloatArray
    price: FloatArray
    shares: FloatArray
    leverage: FloatArray
    cash: FloatArray
    volume: FloatArray
    eligible: BoolArray


def build_grid() -> Grid:
    """Weekday grid and sessions of the four venues from their published calendars.

    Sessions and closes come from pandas_market_calendars for explicit dates. Raises ValueError
    if a venue holds a session at a weekend, which the grid could not carry.
    """
    days = pd.bdate_range(FIRST_DAY, LAST_DAY)
    minutes = np.full((len(EXCHANGES), len(days)), -1, dtype=np.int64)
    for row, exchange in enumerate(EXCHANGES):
        schedule = calendars.get_calendar(exchange.code).schedule(FIRST_DAY, LAST_DAY)
        where = days.get_indexer(schedule.index)
        if (where < 0).any():
            raise ValueError(f"{exchange.code} has a session at a weekend")
        local = schedule["market_close"].dt.tz_convert(exchange.zone)
        minutes[row, where] = (local.dt.hour * 60 + local.dt.minute).to_numpy()
    is_open = minutes >= 0
    counts = is_open.sum(axis=1).astype(np.int64)
    sessions = np.full((len(EXCHANGES), int(counts.max())), -1, dtype=np.int64)
    for row, count in enumerate(counts):
        sessions[row, :count] = np.flatnonzero(is_open[row])
    return Grid(days.to_numpy().astype("datetime64[D]"), is_open, minutes, sessions, counts)


def draw_factors(params: Parameters, grid: Grid, rng: np.random.Generator) -> Factors:
    """Benchmarks that share one world factor, three style factors and a slow cash rate.

    All (E, T) or (E, T, 3), decimals per day and zero where the venue has no session.
    """
    shape = grid.is_open.shape
    world = params.world_sd * rng.standard_normal((grid.days.size,))
    local = params.local_sd * rng.standard_normal(shape)
    style = params.style_sd * rng.standard_normal((*shape, 3))
    year = grid.days.astype("datetime64[Y]").astype(np.int64) + 1970
    # The cash rate climbs from half to one and a half times its mean over the ten years.
    slope = 0.5 + bounded((year - FIRST_YEAR) / (YEARS - 1), 0.0, 1.0)
    level = np.array([e.cash_rate for e in EXCHANGES]) / 252.0
    risk_free = np.round(level[:, None] * slope[None, :], 8)
    benchmark = np.round(params.benchmark_mean + world[None, :] + local, 6)
    return Factors(
        np.where(grid.is_open, benchmark, 0.0),
        np.where(grid.is_open, risk_free, 0.0),
        np.where(grid.is_open[:, :, None], np.round(style, 6), 0.0),
    )


def draw_companies(params: Parameters, rng: np.random.Generator) -> Companies:
    """300 invented companies; every array has shape (300,), `loadings` (300, 3).

    Values are rounded so that the last bits of `exp` on another processor change nothing.
    """
    n = COMPANIES
    order = rng.permutation(np.repeat(np.arange(len(EXCHANGES)), [e.companies for e in EXCHANGES]))
    industry = rng.integers(0, len(INDUSTRIES), n)
    niche = industry * params.niches_per_industry + rng.integers(0, params.niches_per_industry, n)
    beta = params.beta_mean + params.beta_sd * rng.standard_normal(n)
    span = np.log(params.noise_sd_high / params.noise_sd_low)
    level = np.array([e.price_level for e in EXCHANGES])[order]
    rate = np.array([e.usd_rate for e in EXCHANGES])[order]
    price = np.round(level * np.exp(0.45 * rng.standard_normal(n)), 2)
    value = params.market_value_median_usd * np.exp(
        params.market_value_log_sd * rng.standard_normal(n)
    )
    shares = np.round(value / (price * rate), 3)
    return Companies(
        exchange=order.astype(np.int64),
        industry=industry,
        niche=niche,
        alpha=np.round(params.alpha_mean + params.alpha_sd * rng.standard_normal(n), 7),
        beta=np.round(bounded(beta, params.beta_low, params.beta_high), 4),
        loadings=np.round(params.style_loading_sd * rng.standard_normal((n, 3)), 4),
        noise_sd=np.round(params.noise_sd_low * np.exp(span * rng.random(n)), 6),
        price=price,
        shares=shares,
        leverage=bounded(params.leverage_mean + 0.12 * rng.standard_normal(n), 0.03, 0.75),
        cash=bounded(params.cash_mean + 0.05 * rng.standard_normal(n), 0.01, 0.40),
        volume=np.round(shares * 1e6 * 0.003 * np.exp(0.4 * rng.standard_normal(n)), 0),
        eligible=rng.random(n) < params.eligible_share,
    )


def draw_returns(
    params: Parameters, grid: Grid, factors: Factors, companies: Companies, rng: np.random.Generator
) -> FloatArray:
    """Simple daily returns before any announcement, (300, T), zero outside sessions.

    Return = alpha + beta * benchmark + loadings * styles + noise, the linear factor model of
    Fama and French (1993) with a Student noise scaled to `noise_sd`; a shared industry part of
    that noise gives same-day noises of one industry the correlation `industry_correlation`.
    """
    venue = companies.exchange
    df, rho = params.noise_degrees_of_freedom, params.industry_correlation
    own = rng.standard_t(df, (COMPANIES, grid.days.size)) * np.sqrt((df - 2.0) / df)
    shared = rng.standard_normal((len(INDUSTRIES), grid.days.size))[companies.industry]
    noise = np.sqrt(rho) * shared + np.sqrt(1.0 - rho) * own
    returns = companies.alpha[:, None] + companies.beta[:, None] * factors.benchmark[venue]
    for k in range(3):
        returns += companies.loadings[:, k, None] * factors.style[venue, :, k]
    returns += companies.noise_sd[:, None] * noise
    return np.where(grid.is_open[venue], returns, 0.0)


def price_paths(companies: Companies, returns: FloatArray) -> FloatArray:
    """Unrounded closes (300, T) in local currency from simple returns (300, T)."""
    return np.asarray(companies.price[:, None] * np.cumprod(1.0 + returns, axis=1))
