"""Expected-return models: each says what its regressors are; one engine fits them all.

A model is ``(offset, regressors)`` on a panel's sessions: E[R] = offset + regressors · parameters.
The constant, where a model has one, is the first regressor.
"""

from __future__ import annotations

import numpy as np

from pipeline.core.prices import Floats, PricePanel

RISK_FREE = "risk_free"
Model = tuple[Floats, Floats]


def market_model(panel: PricePanel) -> Model:
    """E[R] = alpha + beta R_m; d = 2 (MacKinlay 1997, JEL 35, eq. 3).

    Returns:
        (T,) zeros and (T, 2) constant and benchmark, simple daily returns.
    """
    return np.zeros(len(panel.sessions)), _with_constant(panel.benchmark)


def market_adjusted(panel: PricePanel) -> Model:
    """E[R] = R_m; d = 0: no parameter, variance about zero (Brown and Warner 1980).

    Returns:
        (T,) benchmark and (T, 0).
    """
    return panel.benchmark, np.empty((len(panel.sessions), 0))


def constant_mean(panel: PricePanel) -> Model:
    """E[R] = the estimation window's mean; d = 1 (Brown and Warner 1980).

    Returns:
        (T,) zeros and (T, 1) constant.
    """
    return np.zeros(len(panel.sessions)), np.ones((len(panel.sessions), 1))


def factor_model(panel: PricePanel) -> Model:
    """E[R] = R_f + alpha + sum of loadings times factors (Fama and French 1993; Carhart 1997).

    The factors are all columns of the factor file but ``risk_free``; d = 1 + their number.

    Returns:
        (T,) risk-free return and (T, d) constant and factors.
    """
    names = [name for name in panel.factors if name != RISK_FREE]
    free = panel.factors.get(RISK_FREE, np.zeros(len(panel.sessions)))
    return free, _with_constant(*(panel.factors[name] for name in names))


def _with_constant(*columns: Floats) -> Floats:
    return np.column_stack([np.ones(len(columns[0])), *columns])
