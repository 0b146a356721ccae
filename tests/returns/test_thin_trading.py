"""Slopes for shares that trade less often than the index, and a robust one.

Scholes and Williams 1977, JFE 5; Dimson 1979, JFE 7; Fowler and Rorke 1983, JFE 12; Huber 1964.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import statsmodels.api as sm

from pipeline.core.window import Window
from tests.returns.panels import (
    ESTIMATION,
    SPAN,
    fitted,
    invented_panel,
    panel_of_returns,
    weekdays,
)

AT = 250


def windows(panel, shift: int) -> np.ndarray:  # type: ignore[no-untyped-def]
    return panel.benchmark[AT + ESTIMATION.start + shift : AT + ESTIMATION.end + 1 + shift]


def test_scholes_williams_by_hand() -> None:
    panel = invented_panel()
    found = fitted("scholes_williams", panel, [2], [AT])
    y = panel.returns[AT + ESTIMATION.start : AT + ESTIMATION.end + 1, 2]
    lag, now, lead = (windows(panel, k) for k in (-1, 0, 1))
    slopes = [sm.OLS(y, sm.add_constant(x)).fit().params[1] for x in (lag, now, lead)]
    rho = np.corrcoef(now, lag)[0, 1]
    beta = sum(slopes) / (1 + 2 * rho)
    assert found.parameters[0, 1] == pytest.approx(beta, rel=1e-10)
    assert found.parameters[0, 0] == pytest.approx(y.mean() - beta * now.mean(), abs=1e-15)
    days = slice(AT + SPAN.start, AT + SPAN.end + 1)
    expected = panel.returns[days, 2] - found.parameters[0, 0] - beta * panel.benchmark[days]
    np.testing.assert_allclose(found.returns[0], expected, atol=1e-15)


def test_dimson_with_fowler_rorke_weights_by_hand() -> None:
    panel = invented_panel()
    found = fitted("dimson", panel, [2], [AT])
    y = panel.returns[AT + ESTIMATION.start : AT + ESTIMATION.end + 1, 2]
    lag, now, lead = (windows(panel, k) for k in (-1, 0, 1))
    b = sm.OLS(y, np.column_stack([np.ones(len(y)), lag, now, lead])).fit().params
    first, second = np.corrcoef(now, lag)[0, 1], np.corrcoef(lead, lag)[0, 1]
    weight = (1 + first + second) / (1 + 2 * first)
    assert found.parameters[0, 1] == pytest.approx(b[2] + weight * (b[1] + b[3]), rel=1e-10)


@pytest.mark.parametrize("model", ["scholes_williams", "dimson"])
def test_a_share_that_trades_late_has_its_beta_back(model: str) -> None:
    """A third of each day's news reaches the price a day late; the market model sees 0.67.

    One market path of 750 days: its own autocorrelation scatters by 0.04, and beta with it.
    """
    stream = np.random.default_rng(4)
    sessions, n = 800, 60
    market = stream.normal(0, 0.01, sessions)
    late = np.concatenate([[0.0], market[:-1]])
    noise = stream.normal(0, 0.01, (sessions, n))
    panel = panel_of_returns(weekdays(sessions), (2 * market + late)[:, None] / 3 + noise, market)
    position = np.full(n, 780)
    wide = Window(-760, -11)
    plain = fitted("market_model", panel, np.arange(n), position, wide, Window(0, 0))
    mended = fitted(model, panel, np.arange(n), position, wide, Window(0, 0))
    assert plain.parameters[:, 1].mean() == pytest.approx(2 / 3, abs=0.03)
    assert mended.parameters[:, 1].mean() == pytest.approx(1.0, abs=0.08)


def test_huber_is_statsmodels_and_shrugs_off_news() -> None:
    panel = invented_panel()
    jumpy = panel.returns.copy()
    jumpy[AT - 60, 2] += 0.4
    spoiled = replace(panel, returns=jumpy)
    found = fitted("huber", spoiled, [2], [AT])
    rows = slice(AT + ESTIMATION.start, AT + ESTIMATION.end + 1)
    x = sm.add_constant(panel.benchmark[rows])
    known = sm.RLM(jumpy[rows, 2], x, M=sm.robust.norms.HuberT()).fit().params
    np.testing.assert_allclose(found.parameters[0], known, rtol=1e-10)
    clean = fitted("market_model", panel, [2], [AT]).parameters[0, 1]
    upset = fitted("market_model", spoiled, [2], [AT]).parameters[0, 1]
    assert abs(found.parameters[0, 1] - clean) < abs(upset - clean)
