"""Measures made from prices against pandas and statsmodels."""

from __future__ import annotations

import inspect

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm

from pipeline.characteristics.design import price_measures
from pipeline.characteristics.recipes import Recipe
from pipeline.core.prices import PricePanel
from pipeline.core.window import Window
from pipeline.registry import PRICE_MEASURES, TABLE, entry
from tests.returns.panels import invented_panel, panel_of_closes

COLUMN, POSITION, WINDOW = np.array([0, 1, 2]), np.array([200, 230, 300]), Window(-60, -11)


@pytest.fixture(scope="module")
def panel() -> PricePanel:
    """The first share misses two sessions of its window, the last nearly all of them."""
    whole = invented_panel()
    close = whole.close.copy()
    close[[150, 170], 0] = np.nan
    close[245:288, 2] = np.nan
    level = np.cumprod(1 + np.nan_to_num(whole.benchmark))
    made = panel_of_closes(whole.sessions, whole.securities, close, level)
    volume = np.random.default_rng(1).integers(100, 9000, close.shape).astype(float)
    volume[175:178, 0] = np.nan
    volume[180, 0] = 0.0
    object.__setattr__(made, "volume", volume)
    return made


def own_rows(panel: PricePanel, column: int, position: int) -> pd.DataFrame:
    """Returns of share and market on the sessions of the window that have both."""
    rows = slice(position + WINDOW.start, position + WINDOW.end + 1)
    frame = pd.DataFrame(
        {
            "own": panel.returns[rows, column],
            "market": panel.benchmark[rows],
            "money": (panel.close * panel.volume)[rows, column] / 1e6,
        }
    )
    return frame[frame[["own", "market"]].notna().all(axis=1)]


def values(panel: PricePanel, key: str) -> np.ndarray:
    found: np.ndarray = entry(PRICE_MEASURES, key).load()(panel, COLUMN, POSITION, WINDOW)
    assert np.isnan(found[2]), "fewer than 60% of the sessions"
    return found[:2]


@pytest.mark.parametrize("row", [0, 1])
def test_run_up_is_the_compounded_return_over_the_market(row: int, panel: PricePanel) -> None:
    own = own_rows(panel, row, int(POSITION[row]))
    known = (1 + own["own"]).prod() - (1 + own["market"]).prod()
    assert values(panel, "run_up")[row] == pytest.approx(known, rel=1e-10)


@pytest.mark.parametrize("row", [0, 1])
def test_beta_and_volatility_of_a_market_model(row: int, panel: PricePanel) -> None:
    """statsmodels OLS."""
    own = own_rows(panel, row, int(POSITION[row]))
    known = sm.OLS(own["own"], sm.add_constant(own["market"])).fit()
    assert values(panel, "beta")[row] == pytest.approx(known.params["market"], rel=1e-9)
    deviation = np.sqrt(known.mse_resid)
    assert values(panel, "volatility")[row] == pytest.approx(deviation, rel=1e-9)


@pytest.mark.parametrize("row", [0, 1])
def test_illiquidity_leaves_out_sessions_without_volume(row: int, panel: PricePanel) -> None:
    """Mean of |return| over money traded: Amihud 2002."""
    own = own_rows(panel, row, int(POSITION[row]))
    traded = own[own["money"] > 0]
    known = (traded["own"].abs() / traded["money"]).mean()
    assert values(panel, "illiquidity")[row] == pytest.approx(known, rel=1e-10)
    assert len(traded) == len(own) - (4 if row == 0 else 0)


@pytest.mark.parametrize("key", [item.key for item in TABLE[PRICE_MEASURES]])
def test_every_measure_looks_back_only(key: str, panel: PricePanel) -> None:
    """Prices after the window change nothing; nor does the unit of the price, illiquidity apart."""
    level = np.cumprod(1 + np.nan_to_num(panel.benchmark))
    close = panel.close.copy()
    close[292:] *= np.linspace(1, 3, len(close) - 292)[:, None]
    later = panel_of_closes(panel.sessions, panel.securities, close, level)
    object.__setattr__(later, "volume", panel.volume)
    function = entry(PRICE_MEASURES, key).load()
    before = function(panel, COLUMN, POSITION, WINDOW)
    np.testing.assert_allclose(function(later, COLUMN, POSITION, WINDOW), before, rtol=1e-12)
    assert inspect.getdoc(function)


def test_price_measures_of_a_table_with_two_exchanges(panel: PricePanel) -> None:
    other = invented_panel(seed=8)
    table = pd.DataFrame(
        {
            "exchange": ["XLON", "XNYS", "XLON", "XNYS"],
            "column": [0, 0, -1, 4],
            "position": [200, 220, 200, 250],
        }
    )
    recipes = [
        Recipe("earlier", "price", measure="run_up", window=WINDOW),
        Recipe("plain", "column", columns=("size",)),
    ]
    functions = {"run_up": entry(PRICE_MEASURES, "run_up").load()}
    panels = {"XLON": panel, "XNYS": other}
    made = price_measures(recipes, table, panels, functions)
    assert list(made) == ["earlier"]
    run_up = functions["run_up"]
    wanted = [
        run_up(panel, np.array([0]), np.array([200]), WINDOW)[0],
        run_up(other, np.array([0]), np.array([220]), WINDOW)[0],
        np.nan,  # no prices
        run_up(other, np.array([4]), np.array([250]), WINDOW)[0],
    ]
    np.testing.assert_array_equal(made["earlier"], wanted)
