"""Every number the demo data are made from, and the small shared types."""

from __future__ import annotations

from dataclasses import asdict, dataclass, replace

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]
DateArray = npt.NDArray[np.datetime64]

DEFAULT_SEED = 3040
FIRST_DAY = "2013-12-02"
LAST_DAY = "2025-02-28"
FIRST_YEAR = 2015
YEARS = 10
COMPANIES = 300
INDUSTRIES = ("packaging", "flavours", "lab_consumables")
STREAMS = (
    "market",
    "companies",
    "noise",
    "company_years",
    "selection",
    "payment",
    "terms",
    "timing",
    "effect",
    "defects",
    "volume",
)


@dataclass(frozen=True, slots=True)
class Exchange:
    """One trading venue: `usd_rate` is the fixed invented value of one currency unit in USD."""

    code: str
    zone: str
    currency: str
    companies: int
    usd_rate: float
    price_level: float
    price_decimals: int
    rule_year: int
    cash_rate: float


EXCHANGES = (
    Exchange("XNYS", "America/New_York", "USD", 120, 1.0, 45.0, 2, 2018, 0.020),
    Exchange("XLON", "Europe/London", "GBP", 75, 1.30, 9.0, 3, 2016, 0.015),
    Exchange("XTKS", "Asia/Tokyo", "JPY", 60, 0.008, 2400.0, 1, 2021, 0.001),
    Exchange("XSTO", "Europe/Stockholm", "SEK", 45, 0.10, 160.0, 2, 2019, 0.010),
)


@dataclass(frozen=True, slots=True)
class Parameters:
    """Coefficients of the data generating process; returns and effects are decimals."""

    # Daily returns.
    benchmark_mean: float = 0.00030
    world_sd: float = 0.0070
    local_sd: float = 0.0060
    style_sd: float = 0.0035
    style_loading_sd: float = 0.30
    alpha_mean: float = 0.00005
    alpha_sd: float = 0.00010
    beta_mean: float = 1.0
    beta_sd: float = 0.25
    beta_low: float = 0.4
    beta_high: float = 1.8
    noise_sd_low: float = 0.007
    noise_sd_high: float = 0.013
    noise_degrees_of_freedom: float = 6.0
    industry_correlation: float = 0.05
    # Company-years.
    market_value_median_usd: float = 1200.0
    market_value_log_sd: float = 1.1
    leverage_mean: float = 0.30
    cash_mean: float = 0.12
    niches_per_industry: int = 5
    divisions_rate: float = 2.0
    run_up_sessions: int = 42
    # Decision to bid; the error is the private signal, N(0, 1).
    announce_const: float = -1.75
    announce_size: float = 0.15
    announce_leverage: float = -0.8
    announce_cash: float = 1.5
    announce_run_up: float = 1.2
    announce_divisions: float = 0.28
    # Payment in shares; the error is N(0, 1).
    pay_const: float = -1.87
    pay_overvaluation: float = 1.75
    pay_relative_size: float = 0.15
    pay_treasury: float = 0.36
    pay_placement: float = 2.50
    treasury_share: float = 0.30
    treasury_low: float = 1.0
    treasury_high: float = 10.0
    eligible_share: float = 0.65
    weak_shrinkage: float = 1.0
    # Announcement effect, total over the three sessions of the event.
    effect_const: float = -0.028
    effect_shares: float = -0.0080
    effect_overvaluation: float = -0.0195
    effect_signal: float = 0.0150
    effect_relative_size: float = -0.0030
    effect_leverage: float = 0.0100
    effect_target_listed: float = -0.0060
    event_variance_low: float = 1.3
    event_variance_high: float = 2.2
    day_split: tuple[float, float, float] = (0.15, 0.60, 0.25)
    earnings_sd_multiple: float = 1.5
    # Terms of the deals.
    relative_size_median: float = 0.12
    relative_size_log_sd: float = 1.1
    relative_size_low: float = 0.006
    relative_size_high: float = 1.99
    listed_share: float = 0.30
    cross_border_share: float = 0.35
    withdrawn_share: float = 0.04
    # Planted mess, in deals.
    after_close_deals: int = 96
    weekend_deals: int = 12
    holiday_deals: int = 5
    date_only_deals: int = 23
    date_only_weekend_deals: int = 2
    earnings_deals: int = 10
    untraded_start: int = -120
    untraded_sessions: int = 25
    split_session: int = -100
    short_history_sessions: int = 60
    pair_gap_sessions: int = 7


WEAK_SHRINKAGE = 0.17


def weakened(params: Parameters) -> Parameters:
    """Parameters whose two instruments move payment by `WEAK_SHRINKAGE` of the usual amount.

    The constant is moved so that the mean of the payment index, and with it the share of deals
    paid in shares, stays near its usual value. Returns a new value; raises nothing.
    """
    lost = 1.0 - WEAK_SHRINKAGE
    treasury = params.treasury_share * (params.treasury_low + params.treasury_high) / 2.0
    in_force = sum(e.companies * (FIRST_YEAR + YEARS - e.rule_year) for e in EXCHANGES)
    placement = params.eligible_share * in_force / (COMPANIES * YEARS)
    shift = lost * (params.pay_treasury * treasury + params.pay_placement * placement)
    return replace(
        params,
        pay_const=round(params.pay_const + shift, 6),
        pay_treasury=round(params.pay_treasury * WEAK_SHRINKAGE, 6),
        pay_placement=round(params.pay_placement * WEAK_SHRINKAGE, 6),
        weak_shrinkage=WEAK_SHRINKAGE,
    )


def bounded(values: FloatArray, low: float, high: float) -> FloatArray:
    """Values of any shape held between `low` and `high`, same units. Raises nothing."""
    return np.minimum(np.maximum(values, low), high)


def streams(seed: int) -> dict[str, np.random.Generator]:
    """One independent random stream per block of the simulation, keyed by `STREAMS`.

    `seed` is a non-negative integer; numpy raises ValueError otherwise. Separate streams keep
    every other draw unchanged when one block is altered.
    """
    children = np.random.SeedSequence(seed).spawn(len(STREAMS))
    return {
        name: np.random.default_rng(child) for name, child in zip(STREAMS, children, strict=True)
    }


def as_record(params: Parameters) -> dict[str, object]:
    """The parameters as plain JSON types, one key per field. Raises nothing."""
    return {k: list(v) if isinstance(v, tuple) else v for k, v in asdict(params).items()}
