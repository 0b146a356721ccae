"""Expected-return models: each says what its regressors are; one engine fits them all.

E[R] = offset + regressors · parameters on a panel's sessions. The constant, where a model has
one, is the first regressor. A model that fits more regressors than it forecasts with (leads and
lags against thin trading) brings an ``aggregate`` that makes one alpha and one beta of them.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from pipeline.core.findings import problem
from pipeline.core.prices import GLOBAL, RISK_FREE, Booleans, Floats, Integers, PricePanel
from pipeline.returns.peers import PeerBook, PeerReturns, everyone

Aggregate = Callable[[Floats, Floats, Floats, Booleans], Floats]
Own = Callable[[Integers, Integers, Integers], Floats]


@dataclass(frozen=True, slots=True, eq=False)
class MeanModel:
    """What a model needs on the T sessions of a panel.

    Attributes:
        offset: (T,) part of the expected return that has no parameter, decimal a day.
        regressors: (T, d), ones first if the model has a constant; d may be 0.
        aggregate: None, or a function of the fitted (n, d) parameters, (n, E) excess returns,
            (d - 1, n, E) regressors but the constant and the (n, E) days used, that gives (n, 2)
            alpha and beta on the benchmark of the same day. Its forecast error then leaves out
            that of the parameters.
        own: None, or a function of (n,) columns, (n,) sessions of day zero and (n, L) sessions
            that gives (n, L) values of one more regressor, the last, which differs between the
            events of a session.
    """

    offset: Floats
    regressors: Floats
    aggregate: Aggregate | None = None
    own: Own | None = None

    @property
    def constant(self) -> bool:
        """Whether the first regressor is a constant."""
        return bool(self.regressors.shape[1]) and bool((self.regressors[:, 0] == 1).all())

    @property
    def parameters(self) -> int:
        """How many parameters are fitted."""
        return int(self.regressors.shape[1]) + (self.own is not None)


def market_model(panel: PricePanel) -> MeanModel:
    """E[R] = alpha + beta R_m; d = 2 (MacKinlay 1997, JEL 35, eq. 3)."""
    return MeanModel(_zero(panel), _with_constant(panel.benchmark))


def market_adjusted(panel: PricePanel) -> MeanModel:
    """E[R] = R_m; d = 0: no parameter, variance about zero (Brown and Warner 1980, JFE 8)."""
    return MeanModel(panel.benchmark, np.empty((len(panel.sessions), 0)))


def constant_mean(panel: PricePanel) -> MeanModel:
    """E[R] = the estimation window's mean; d = 1 (Brown and Warner 1980, JFE 8)."""
    return MeanModel(_zero(panel), np.ones((len(panel.sessions), 1)))


def excess_return(panel: PricePanel) -> MeanModel:
    """E[R] = R_f + beta (R_m - R_f), no constant; d = 1 (Sharpe 1964, JF 19; Lintner 1965).

    ``risk_free`` is a column of the factor file, decimal a day.
    """
    free = _factor(panel, RISK_FREE)
    return MeanModel(free, (panel.benchmark - free)[:, None])


def factor_model(panel: PricePanel) -> MeanModel:
    """E[R] = R_f + alpha + sum of loadings times factors (Fama and French 1993; Carhart 1997).

    The factors are all columns of the factor file but ``risk_free`` and ``global_market``;
    d = 1 + their number.
    """
    names = [name for name in panel.factors if name not in (RISK_FREE, GLOBAL)]
    free = panel.factors.get(RISK_FREE, _zero(panel))
    return MeanModel(free, _with_constant(*(panel.factors[name] for name in names)))


def local_and_global(panel: PricePanel) -> MeanModel:
    """E[R] = alpha + beta R_local + sum of gamma_k R_global(t+k), k = -1, 0, 1; d = 5.

    Markets that close at different hours need the lead and the lag (Dimson 1979, JFE 7).
    ``global_market`` is a column of the factor file.
    """
    world = _factor(panel, GLOBAL)
    regressors = _with_constant(panel.benchmark, *(_shifted(world, k) for k in (-1, 0, 1)))
    return MeanModel(_zero(panel), regressors)


def peer_adjusted(panel: PricePanel, book: PeerBook | None = None) -> MeanModel:
    """E[R] = alpha + beta R_m + gamma R_peers; d = 3 (King 1966, J. Business 39).

    R_peers is the equal-weighted return of the event's own peers, less the company itself, the
    deal's counterparty and companies with a deal within the event's windows. Without a ``book``
    every other company of the panel is a peer.
    """
    peers = PeerReturns(panel, book or everyone(panel))
    return MeanModel(_zero(panel), _with_constant(panel.benchmark), own=peers)


def scholes_williams(panel: PricePanel) -> MeanModel:
    """E[R] = alpha + beta R_m with beta = (b_-1 + b_0 + b_1) / (1 + 2 rho).

    b_k is the simple slope on R_m(t+k), rho the benchmark's first autocorrelation; for shares
    that trade less often than the index (Scholes and Williams 1977, JFE 5).
    """
    leads = _with_constant(*(_shifted(panel.benchmark, k) for k in (-1, 0, 1)))
    return MeanModel(_zero(panel), leads, _scholes_williams)


def dimson(panel: PricePanel) -> MeanModel:
    """E[R] = alpha + beta R_m with beta = b_0 + w (b_-1 + b_1), b from one regression on all three.

    w = (1 + rho_1 + rho_2) / (1 + 2 rho_1) (Dimson 1979, JFE 7; Fowler and Rorke 1983, JFE 12).
    """
    leads = _with_constant(*(_shifted(panel.benchmark, k) for k in (-1, 0, 1)))
    return MeanModel(_zero(panel), leads, _fowler_rorke)


def huber(panel: PricePanel) -> MeanModel:
    """E[R] = alpha + beta R_m, slope by Huber's M-estimator (Huber 1964, Annals of Math. Stat. 35).

    For estimation windows with days of other news; one fit an event, by statsmodels.
    """
    return MeanModel(_zero(panel), _with_constant(panel.benchmark), _huber)


def _scholes_williams(parameters: Floats, y: Floats, x: Floats, used: Booleans) -> Floats:
    lag, now, lead = (_slope(y, each, used) for each in x)
    rho = _autocorrelation(x[1], x[0], used)
    return _line(y, x[1], used, (lag + now + lead) / (1 + 2 * rho))


def _fowler_rorke(parameters: Floats, y: Floats, x: Floats, used: Booleans) -> Floats:
    first = _autocorrelation(x[1], x[0], used)
    second = _autocorrelation(x[2], x[0], used)
    weight = (1 + first + second) / (1 + 2 * first)
    beta = parameters[:, 2] + weight * (parameters[:, 1] + parameters[:, 3])
    return _line(y, x[1], used, beta)


def _huber(parameters: Floats, y: Floats, x: Floats, used: Booleans) -> Floats:
    import statsmodels.api as sm

    fitted = np.full((len(y), 2), np.nan)
    for row in np.flatnonzero(used.sum(axis=1) > 2):
        kept = used[row]
        design = np.column_stack([np.ones(kept.sum()), x[0, row, kept]])
        fitted[row] = sm.RLM(y[row, kept], design, M=sm.robust.norms.HuberT()).fit().params
    return fitted


def _mean(values: Floats, used: Booleans) -> Floats:
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray(np.where(used, values, 0.0).sum(axis=1) / used.sum(axis=1))


def _cross(a: Floats, b: Floats, used: Booleans) -> Floats:
    ac, bc = a - _mean(a, used)[:, None], b - _mean(b, used)[:, None]
    return np.asarray(np.where(used, ac * bc, 0.0).sum(axis=1))


def _slope(y: Floats, x: Floats, used: Booleans) -> Floats:
    with np.errstate(invalid="ignore", divide="ignore"):
        return _cross(y, x, used) / _cross(x, x, used)


def _autocorrelation(now: Floats, before: Floats, used: Booleans) -> Floats:
    scale = np.sqrt(_cross(now, now, used) * _cross(before, before, used))
    with np.errstate(invalid="ignore", divide="ignore"):
        return _cross(now, before, used) / scale


def _line(y: Floats, market: Floats, used: Booleans, beta: Floats) -> Floats:
    alpha = _mean(y, used) - beta * _mean(market, used)
    return np.column_stack([alpha, beta])


def _zero(panel: PricePanel) -> Floats:
    return np.zeros(len(panel.sessions))


def _with_constant(*columns: Floats) -> Floats:
    return np.column_stack([np.ones(len(columns[0])), *columns])


def _shifted(series: Floats, ahead: int) -> Floats:
    """(T,) the series ``ahead`` sessions later; NaN at the ends."""
    moved = np.roll(series, -ahead)
    if ahead > 0:
        moved[-ahead:] = np.nan
    elif ahead < 0:
        moved[:-ahead] = np.nan
    return moved


def _factor(panel: PricePanel, name: str) -> Floats:
    if name in panel.factors:
        return panel.factors[name]
    raise problem(
        "missing_column",
        "factors",
        column=name,
        got="no such column; the file has " + (", ".join(panel.factors) or "none"),
        expected=f"a column '{name}', decimal a day, needed by the expected-return model",
        remedy="Add the column, or take the model out of [expected_returns].",
    )
