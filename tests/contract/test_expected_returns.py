"""What every expected-return model of the registry owes its caller, whatever it expects."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from pipeline.core.prices import PricePanel
from pipeline.core.window import Window
from pipeline.registry import EXPECTED_RETURNS, TABLE, Entry
from tests.returns.panels import ESTIMATION, SPAN, fitted, invented_panel, panel_of_closes

COLUMNS, POSITIONS = [0, 3, 5, 2], [150, 200, 250, 305]


@pytest.fixture(scope="module")
def panel() -> PricePanel:
    return invented_panel()


@pytest.fixture(params=TABLE[EXPECTED_RETURNS], ids=lambda item: item.key)
def model(request: pytest.FixtureRequest) -> Entry:
    return request.param


def test_an_offset_and_regressors_on_every_session(model: Entry, panel: PricePanel) -> None:
    made = model.load()(panel)
    offset, regressors = made.offset, made.regressors
    sessions = len(panel.sessions)
    assert offset.shape == (sessions,)
    assert regressors.ndim == 2
    assert regressors.shape[0] == sessions
    assert offset.dtype == regressors.dtype == np.float64
    constant = (regressors == 1).all(axis=0)
    assert not constant[1:].any(), "a constant comes first"
    assert made.constant == (bool(regressors.shape[1]) and bool(constant[0]))


def test_the_registry_says_what_it_is_for(model: Entry) -> None:
    documentation = model.load().__doc__
    assert documentation
    assert "E[R]" in documentation
    assert any(character.isdigit() for character in documentation), "no year of a source"


def test_residuals_and_abnormal_returns_add_up(model: Entry, panel: PricePanel) -> None:
    """Residuals are orthogonal to the regressors, and AR + E[R] is the return itself.

    A model that makes one slope of several gives up orthogonality to each of them.
    """
    found = fitted(model.key, panel, COLUMNS, POSITIONS)
    made = model.load()(panel)
    regressors = np.ones((len(panel.sessions), 0)) if made.aggregate else made.regressors
    for row, (column, position) in enumerate(zip(COLUMNS, POSITIONS, strict=True)):
        rows = np.arange(position + ESTIMATION.start, position + ESTIMATION.end + 1)
        residual = found.estimation_returns[row]
        assert np.abs(regressors[rows].T @ residual).max(initial=0.0) < 1e-12
        d = made.parameters
        variance = np.sum(residual**2) / (len(rows) - d)
        np.testing.assert_allclose(found.residual_variance[row], variance, rtol=1e-10)
        days = np.arange(position + SPAN.start, position + SPAN.end + 1)
        whole = (found.returns + found.expected)[row]
        np.testing.assert_allclose(whole, panel.returns[days, column], atol=1e-14)


def test_the_forecast_error_is_never_below_the_residual_one(
    model: Entry, panel: PricePanel
) -> None:
    found = fitted(model.key, panel, COLUMNS, POSITIONS)
    for window in (Window(0, 0), Window(-1, 1), SPAN):
        simple = found.residual_variance * len(window)
        ratio = found.car_variance(window) / simple
        assert (ratio >= 1 - 1e-12).all()
        if found.mean_parameters == 0 or model.load()(panel).aggregate:
            np.testing.assert_allclose(ratio, 1.0, rtol=1e-12)
        else:
            assert (ratio > 1).all()


def test_the_scale_of_prices_does_not_matter(model: Entry, panel: PricePanel) -> None:
    """Pence or pounds: a return knows no unit."""
    level = 1000 * np.cumprod(1 + np.nan_to_num(panel.benchmark))
    pence = panel_of_closes(
        panel.sessions, panel.securities, panel.close * 100, level * 7, panel.factors
    )
    one = fitted(model.key, panel, COLUMNS, POSITIONS)
    other = fitted(model.key, pence, COLUMNS, POSITIONS)
    np.testing.assert_allclose(one.returns, other.returns, atol=1e-12)


def test_what_lies_outside_the_windows_does_not_matter(model: Entry, panel: PricePanel) -> None:
    """No look-ahead: neither the days after the windows nor those in the gap are used."""
    noisy = panel.returns.copy()
    stream = np.random.default_rng(1)
    position = 250
    gap = slice(position + ESTIMATION.end + 1, position + SPAN.start)
    noisy[gap] = stream.normal(0, 0.5, noisy[gap].shape)
    noisy[position + SPAN.end + 1 :] = 9.0
    one = fitted(model.key, panel, [1], [position])
    other = fitted(model.key, replace(panel, returns=noisy), [1], [position])
    np.testing.assert_array_equal(one.returns, other.returns)
    np.testing.assert_array_equal(one.residual_variance, other.residual_variance)


def test_an_effect_on_the_day_is_found_in_full(model: Entry, panel: PricePanel) -> None:
    lifted = panel.returns.copy()
    lifted[250, 1] += 0.01
    one = fitted(model.key, panel, [1], [250])
    other = fitted(model.key, replace(panel, returns=lifted), [1], [250])
    found = other.car(Window(-1, 1)) - one.car(Window(-1, 1))
    np.testing.assert_allclose(found, 0.01, rtol=1e-10)


def test_an_event_without_a_return_is_not_a_number(model: Entry, panel: PricePanel) -> None:
    silent = panel.returns.copy()
    silent[:, 2] = np.nan
    found = fitted(model.key, replace(panel, returns=silent), [2, 1], [250, 250])
    assert found.observations.tolist() == [0, len(ESTIMATION)]
    assert np.isnan(found.residual_variance).tolist() == [True, False]
    assert found.complete(Window(-1, 1)).tolist() == [False, True]
