"""Portfolios in calendar time: what holding every recent deal's company has earned."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd

from pipeline.core.estimate import t_reach
from pipeline.core.prices import GLOBAL, RISK_FREE, Booleans, Dates, Floats, Integers, PricePanel
from pipeline.core.tables import typed_frame

FEWEST_SESSIONS = 30
COLUMNS = {
    "horizon": "int64",
    "weighting": "str",
    "regression": "str",
    "alpha": "float64",
    "std_error": "float64",
    "statistic": "float64",
    "df": "float64",
    "p_value": "float64",
    "effect": "float64",
    "ci_low": "float64",
    "ci_high": "float64",
    "market_slope": "float64",
    "deals": "int64",
    "sessions": "int64",
    "sessions_left_out": "int64",
    "mean_holdings": "float64",
    "errors": "str",
    "reason": "str",
}


@dataclass(frozen=True, slots=True)
class CalendarTimeOptions:
    """What the study asks of the portfolios.

    Attributes:
        horizons: sessions a company is held after its deal; none asked for if empty.
        weightings: ``equal``, ``value`` or both.
        first_session: the first session held, counted from day zero.
        fewest_holdings: companies a session must hold to count.
        factors: whether the factor file's columns take the benchmark's place.
        newey_west: whether errors allow for autocorrelation, not for unequal variance alone.
        level: of the intervals.
    """

    horizons: tuple[int, ...] = ()
    weightings: tuple[str, ...] = ("equal",)
    first_session: int = 1
    fewest_holdings: int = 10
    factors: bool = False
    newey_west: bool = True
    level: float = 0.95


@dataclass(frozen=True, slots=True, eq=False)
class Portfolio:
    """One portfolio's return on T sessions on which it holds anything.

    Attributes:
        days: (T,) dates.
        excess: (T,) return over the risk-free rate, decimal; over zero without one.
        factors: (T, k) returns of the benchmark over the same rate, or of the factors, each
            weighted as the holdings are.
        holdings: (T,) companies held.
        deals: deals that were held at all.
    """

    days: Dates
    excess: Floats
    factors: Floats
    holdings: Integers
    deals: int


def calendar_time(
    panels: Mapping[str, PricePanel], deals: pd.DataFrame, options: CalendarTimeOptions
) -> pd.DataFrame:
    """The mean abnormal return a session of companies with a recent deal, and times the horizon.

    R_pt - R_ft = alpha + b'F_t + e_t, where portfolio p holds on session t every company whose
    deal came in the last H sessions (Jaffe 1974, J. Business 47; Mandelker 1974, JFE 1; Fama 1998,
    JFE 49). Deals that move together enter through the portfolio's own variance, so clustering in
    time does no harm; the price is power. Sessions with fewer holdings than asked are left out;
    a second regression weighs each session by its holdings (errors ∝ 1/√n_t). Errors: Newey and
    West 1987, Econometrica 55, with floor(4 (T/100)^(2/9)) lags and the factor T/(T - k) (Newey
    and West 1994, REStud 61), or White's (1980) with the same factor; Student t, T - k.

    Args:
        panels: exchange -> prices.
        deals: exchange, column, position, market_value (only for value weights); one row a deal.
        options: see there.

    Returns:
        One row a horizon, weighting and regression; decimal. ``alpha`` is a session's,
        ``effect`` alpha times the horizon with its interval; ``reason`` says why there is none.
    """
    rows = (
        _row(made, horizon, weighting, weighted, options)
        for horizon in options.horizons
        for weighting in options.weightings
        for made in (portfolio(panels, deals, horizon, weighting, options),)
        for weighted in (False, True)
    )
    return typed_frame(rows, COLUMNS)


def portfolio(
    panels: Mapping[str, PricePanel],
    deals: pd.DataFrame,
    horizon: int,
    weighting: str,
    options: CalendarTimeOptions,
) -> Portfolio:
    """The portfolio that holds each company for ``horizon`` sessions after its deal.

    A company with two recent deals is held once. Value weights are market values at the
    announcement that grow with the share while it is held; a deal without one is not held.
    """
    parts = list(_parts(panels, deals, horizon, weighting, options))
    days = np.unique(np.concatenate([part.days for part in parts]))
    k = parts[0].factors.shape[1]
    weight, excess, holdings = np.zeros((3, len(days)))
    factors = np.zeros((len(days), k))
    for part in parts:
        at = np.searchsorted(days, part.days)
        weight[at] += part.weight
        excess[at] += part.excess
        factors[at] += part.factors
        holdings[at] += part.holdings
    held = holdings > 0
    total = weight[held]
    return Portfolio(
        days=days[held],
        excess=excess[held] / total,
        factors=factors[held] / total[:, None],
        holdings=holdings[held].astype(np.int64),
        deals=sum(part.deals for part in parts),
    )


@dataclass(frozen=True, slots=True, eq=False)
class _Part:
    """Weighted sums over the holdings of one exchange, (T,) each and (T, k) of the factors."""

    days: Dates
    weight: Floats
    excess: Floats
    factors: Floats
    holdings: Floats
    deals: int


def _parts(
    panels: Mapping[str, PricePanel],
    deals: pd.DataFrame,
    horizon: int,
    weighting: str,
    options: CalendarTimeOptions,
) -> Iterator[_Part]:
    for exchange, own in deals.groupby("exchange", sort=True):
        panel = panels[str(exchange)]
        free = panel.factors.get(RISK_FREE, np.zeros(len(panel.sessions)))
        factors = _factors(panel, free, options.factors)
        columns, at = np.unique(own["column"].to_numpy(), return_inverse=True)
        returns = panel.returns[:, columns]
        value = own["market_value"].to_numpy(np.float64) if weighting == "value" else None
        start = own["position"].to_numpy() + options.first_session
        weights = _weights(returns, at, start, horizon, value)
        priced = np.isfinite(free) & np.isfinite(factors).all(axis=1)
        held = (weights > 0) & np.isfinite(returns) & priced[:, None]
        weights = np.where(held, weights, 0.0)
        weight = weights.sum(axis=1)
        safe = np.where(held, returns, 0.0)
        yield _Part(
            days=panel.sessions,
            weight=weight,
            excess=(weights * safe).sum(axis=1) - weight * np.where(priced, free, 0.0),
            factors=weight[:, None] * np.where(priced[:, None], factors, 0.0),
            holdings=held.sum(axis=1).astype(np.float64),
            deals=_held_deals(held, at, start, horizon),
        )


def _factors(panel: PricePanel, free: Floats, use_factors: bool) -> Floats:
    """(T, k) the factors but the rates, or the benchmark over the risk-free rate."""
    if not use_factors:
        return (panel.benchmark - free)[:, None]
    names = [name for name in panel.factors if name not in (RISK_FREE, GLOBAL)]
    return np.column_stack([panel.factors[name] for name in names])


def _weights(
    returns: Floats, at: Integers, start: Integers, horizon: int, value: Floats | None
) -> Floats:
    """(T, S) weight at the beginning of each session, zero where a company is not held."""
    weights = np.zeros(returns.shape)
    for row in np.argsort(start, kind="stable"):
        first, column = int(start[row]), at[row]
        if value is None:
            weights[first : first + horizon, column] = 1.0
        elif np.isfinite(value[row]) and value[row] > 0:
            moves = np.nan_to_num(returns[first : first + horizon, column])
            growth = np.cumprod(np.concatenate([[1.0], 1 + moves[:-1]]))
            weights[first : first + horizon, column] = value[row] * growth[: len(moves)]
    return weights


def _held_deals(held: Booleans, at: Integers, start: Integers, horizon: int) -> int:
    spans = zip(start, at, strict=True)
    return sum(bool(held[first : first + horizon, column].any()) for first, column in spans)


def _row(
    made: Portfolio, horizon: int, weighting: str, weighted: bool, options: CalendarTimeOptions
) -> dict[str, object]:
    enough = made.holdings >= options.fewest_holdings
    sessions, k = int(enough.sum()), made.factors.shape[1] + 1
    shared: dict[str, object] = {
        "horizon": horizon,
        "weighting": weighting,
        "regression": "sessions weighted by holdings" if weighted else "every session alike",
        "deals": made.deals,
        "sessions": sessions,
        "sessions_left_out": len(enough) - sessions,
        "mean_holdings": float(made.holdings[enough].mean()) if sessions else np.nan,
        "errors": "Newey–West" if options.newey_west else "White",
        "reason": "",
    }
    if sessions < FEWEST_SESSIONS + k:
        names = ("alpha", "std_error", "statistic", "df", "p_value", "effect", "ci_low", "ci_high")
        nothing = dict.fromkeys((*names, "market_slope"), np.nan)
        reason = f"{sessions} sessions hold {options.fewest_holdings} companies or more"
        return {**shared, **nothing, "reason": reason}
    weights = made.holdings[enough] if weighted else np.ones(sessions)
    numbers = fit_alpha(made.excess[enough], made.factors[enough], weights, options.newey_west)
    reach = t_reach(options.level, numbers["df"]) * numbers["std_error"]
    return {
        **shared,
        **numbers,
        "effect": numbers["alpha"] * horizon,
        "ci_low": (numbers["alpha"] - reach) * horizon,
        "ci_high": (numbers["alpha"] + reach) * horizon,
    }


def fit_alpha(
    excess: Floats, factors: Floats, weights: Floats | Integers, newey_west: bool
) -> dict[str, float]:
    """alpha of (T,) excess returns on (T, k) factors, sessions weighted by (T,) ``weights``."""
    import statsmodels.api as sm

    model = sm.WLS(excess, sm.add_constant(factors, has_constant="add"), weights=weights)
    lags = int(4 * (len(excess) / 100) ** (2 / 9))
    if newey_west:
        rule = {"cov_type": "HAC", "cov_kwds": {"maxlags": lags, "use_correction": True}}
    else:
        rule = {"cov_type": "HC1"}
    found = model.fit(use_t=True, **rule)
    return {
        "alpha": float(found.params[0]),
        "std_error": float(found.bse[0]),
        "statistic": float(found.tvalues[0]),
        "df": float(found.df_resid),
        "p_value": float(found.pvalues[0]),
        "market_slope": float(found.params[1]),
    }
