"""Factor models on a long factor file that a package ships, against statsmodels.

Monthly factors and portfolios 1949 to 2017 as linearmodels carries them (``french``; Fama and
French 1993, JFE 33; Carhart 1997, JF 52), a month standing for a session.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from linearmodels.datasets import french

from pipeline.core.window import Window
from pipeline.registry import EXPECTED_RETURNS, entry
from pipeline.returns.fit import Events, fit_events
from tests.returns.panels import panel_of_returns

ESTIMATION, SPAN = Window(-150, -13), Window(-2, 2)
PORTFOLIOS = ["NoDur", "Enrgy", "BusEq", "S1V1", "S1V5", "S5M1", "S5M5"]
MODELS = {
    "excess_return": [],
    "factor_model of one": ["MktRF"],
    "factor_model of three": ["MktRF", "SMB", "HML"],
    "factor_model of four": ["MktRF", "SMB", "HML", "Mom"],
}


@pytest.fixture(scope="module")
def table() -> pd.DataFrame:
    return french.load().set_index("dates")


@pytest.mark.parametrize("case", MODELS)
def test_alpha_loadings_sigma_and_forecast_error_are_those_of_statsmodels(
    table: pd.DataFrame, case: str
) -> None:
    names = MODELS[case]
    free = table["RF"].to_numpy()
    days = table.index.to_numpy().astype("datetime64[D]")
    panel = panel_of_returns(
        days,
        np.asfortranarray(table[PORTFOLIOS].to_numpy()),
        (table["MktRF"] + table["RF"]).to_numpy(),
    )
    factors = {name: table[name].to_numpy() for name in names}
    panel = replace(panel, factors={**factors, "risk_free": free})
    column = np.arange(len(PORTFOLIOS))
    position = np.linspace(200, 800, len(PORTFOLIOS)).astype(np.int64)
    events = Events(column, position, np.zeros((len(column), len(ESTIMATION)), dtype=np.bool_))
    model = entry(EXPECTED_RETURNS, case.split(" ")[0]).load()(panel)
    found = fit_events(case, tuple(PORTFOLIOS), model, panel, events, ESTIMATION, SPAN)
    for row, (name, at) in enumerate(zip(PORTFOLIOS, position, strict=True)):
        excess = table[name].to_numpy() - free
        x = table[names].to_numpy() if names else table[["MktRF"]].to_numpy()
        x = sm.add_constant(x) if names else x
        window = slice(at + ESTIMATION.start, at + ESTIMATION.end + 1)
        event = slice(at + SPAN.start, at + SPAN.end + 1)
        fit = sm.OLS(excess[window], x[window]).fit()
        np.testing.assert_allclose(found.parameters[row], fit.params, rtol=0, atol=1e-9)
        assert found.residual_variance[row] == pytest.approx(fit.mse_resid, abs=1e-12)
        abnormal = excess[event] - x[event] @ fit.params
        np.testing.assert_allclose(found.returns[row], abnormal, rtol=0, atol=1e-9)
        total = x[event].sum(axis=0)
        variance = fit.mse_resid * len(SPAN) + total @ fit.cov_params() @ total
        assert found.car_variance(SPAN)[row] == pytest.approx(variance, rel=1e-9)
