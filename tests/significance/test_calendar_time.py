"""Portfolios in calendar time against ones put together by hand, date by date."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from scipy import stats

from pipeline.core.prices import PricePanel
from pipeline.report.document import Document, Interval
from pipeline.report.horizons import calendar_time_table, horizons_section
from pipeline.report.material import Material
from pipeline.significance.calendar_time import (
    CalendarTimeOptions,
    calendar_time,
    fit_alpha,
    portfolio,
)
from tests.report.runs import full_run
from tests.returns.panels import panel_of_closes, weekdays

HORIZON = 40
OPTIONS = CalendarTimeOptions((HORIZON,), ("equal", "value"), fewest_holdings=4)


def market_of(exchange: str, sessions: np.ndarray, seed: int) -> PricePanel:
    """Eight shares; one is listed late, one stops, one has a gap; a rate and a factor."""
    stream = np.random.default_rng(seed)
    T = len(sessions)
    market = stream.normal(0.0004, 0.01, T)
    close = 50 * np.cumprod(1 + market[:, None] + stream.normal(0.0003, 0.02, (T, 8)), axis=0)
    close[:90, 1] = np.nan
    close[170:, 2] = np.nan
    close[120:124, 3] = np.nan
    rates = np.full(T, 0.0001)
    factors = {"risk_free": rates, "market": market - rates, "size": stream.normal(0, 0.005, T)}
    codes = [f"{exchange}{at}" for at in range(8)]
    return panel_of_closes(sessions, codes, close, 100 * np.cumprod(1 + market), factors, exchange)


@pytest.fixture(scope="module")
def panels() -> dict[str, PricePanel]:
    """Two exchanges with holidays of their own."""
    days = weekdays(300)
    return {
        "XLON": market_of("XLON", np.delete(days, [50, 160]), 1),
        "XNYS": market_of("XNYS", np.delete(days, [77, 161, 162]), 2),
    }


@pytest.fixture(scope="module")
def deals() -> pd.DataFrame:
    """Deals that overlap, two of one company within the horizon, one without market value."""
    stream = np.random.default_rng(3)
    rows = [
        {"exchange": exchange, "column": column, "position": int(position)}
        for exchange in ("XLON", "XNYS")
        for column in range(8)
        for position in sorted(stream.integers(95, 290, 2))
    ]
    rows.append({"exchange": "XLON", "column": 0, "position": rows[0]["position"] + 9})
    table = pd.DataFrame(rows)
    table["market_value"] = stream.uniform(10, 900, len(table)).round(1)
    table.loc[4, "market_value"] = np.nan
    return table


def by_hand(
    panels: dict[str, PricePanel], deals: pd.DataFrame, weighting: str
) -> dict[np.datetime64, tuple[float, float, int]]:
    """date -> excess return, market's excess return, companies held; one cell at a time."""
    weights: dict[tuple[np.datetime64, str, int], float] = {}
    order = deals.sort_values("position", kind="stable")
    for exchange, column, position, value in order.itertuples(index=False):
        panel, worth = panels[exchange], 1.0 if weighting == "equal" else value
        for at in range(position + 1, min(position + 1 + HORIZON, len(panel.sessions))):
            if worth > 0:
                weights[panel.sessions[at], exchange, column] = worth
            moved = panel.returns[at, column]
            if weighting == "value" and np.isfinite(moved):
                worth *= 1 + moved
    found: dict[np.datetime64, list[tuple[float, float, float]]] = {}
    for (day, exchange, column), weight in weights.items():
        panel = panels[exchange]
        at = panel.position(day)
        own = panel.returns[at, column]
        if np.isfinite(own):
            rate = panel.factors["risk_free"][at]
            found.setdefault(day, []).append((weight, own - rate, panel.benchmark[at] - rate))
    return {
        day: (
            float(np.average([own for _, own, _ in held], weights=[w for w, *_ in held])),
            float(np.average([m for *_, m in held], weights=[w for w, *_ in held])),
            len(held),
        )
        for day, held in found.items()
    }


@pytest.mark.parametrize("weighting", ["equal", "value"])
def test_the_portfolio_is_the_one_made_by_hand(
    weighting: str, panels: dict[str, PricePanel], deals: pd.DataFrame
) -> None:
    made = portfolio(panels, deals, HORIZON, weighting, OPTIONS)
    known = by_hand(panels, deals, weighting)
    assert made.days.tolist() == sorted(day.item() for day in known)
    rows = np.array([known[day] for day in made.days])
    np.testing.assert_allclose(made.excess, rows[:, 0], rtol=1e-10, atol=1e-14)
    np.testing.assert_allclose(made.factors[:, 0], rows[:, 1], rtol=1e-10, atol=1e-14)
    assert made.holdings.tolist() == rows[:, 2].astype(int).tolist()
    assert made.holdings.max() < len(deals)


@pytest.mark.parametrize("newey_west", [True, False])
def test_rows_are_regressions_of_that_portfolio(
    newey_west: bool, panels: dict[str, PricePanel], deals: pd.DataFrame
) -> None:
    """statsmodels on the hand-made series; the weighted one divided through by its error."""
    options = replace(OPTIONS, newey_west=newey_west)
    frame = calendar_time(panels, deals, options)
    known = by_hand(panels, deals, "equal")
    days = [day for day in sorted(known) if known[day][2] >= 4]
    excess, market, held = np.array([known[day] for day in days]).T
    rule = {"cov_type": "HC1"}
    if newey_west:
        lags = int(4 * (len(days) / 100) ** (2 / 9))
        rule = {"cov_type": "HAC", "cov_kwds": {"maxlags": lags, "use_correction": True}}
    for regression, root in (
        ("every session alike", held**0),
        ("sessions weighted by holdings", held**0.5),
    ):
        row = frame[(frame["weighting"] == "equal") & (frame["regression"] == regression)].iloc[0]
        fitted = sm.OLS(excess * root, np.column_stack([root, market * root])).fit(**rule)
        assert row["alpha"] == pytest.approx(fitted.params[0], rel=1e-9)
        assert row["std_error"] == pytest.approx(fitted.bse[0], rel=1e-9)
        assert row["market_slope"] == pytest.approx(fitted.params[1], rel=1e-9)
        assert (row["sessions"], row["df"]) == (len(days), len(days) - 2)
        assert row["sessions_left_out"] == len(known) - len(days)
        p = 2 * stats.t.sf(abs(row["statistic"]), len(days) - 2)
        assert row["p_value"] == pytest.approx(p, rel=1e-8)
        low, high = stats.t.interval(0.95, len(days) - 2, fitted.params[0], fitted.bse[0])
        assert row["effect"] == pytest.approx(HORIZON * fitted.params[0], rel=1e-9)
        assert [row["ci_low"], row["ci_high"]] == pytest.approx([HORIZON * low, HORIZON * high])


def test_factors_take_the_place_of_the_benchmark(
    panels: dict[str, PricePanel], deals: pd.DataFrame
) -> None:
    made = portfolio(panels, deals, HORIZON, "equal", replace(OPTIONS, factors=True))
    assert made.factors.shape == (len(made.days), 2)
    market = portfolio(panels, deals, HORIZON, "equal", OPTIONS)
    np.testing.assert_allclose(made.factors[:, 0], market.factors[:, 0], atol=1e-12)


def test_a_known_drift_is_found(panels: dict[str, PricePanel], deals: pd.DataFrame) -> None:
    """Ten basis points added to every held session are ten more of alpha."""
    lifted = {}
    for exchange, panel in panels.items():
        returns = panel.returns.copy(order="F")
        for column, position in deals.loc[
            deals["exchange"] == exchange, ["column", "position"]
        ].itertuples(index=False):
            span = slice(position + 1, position + 1 + HORIZON)
            returns[span, column] = panel.returns[span, column] + 0.001
        lifted[exchange] = replace(panel, returns=returns)
    before, after = (calendar_time(p, deals, OPTIONS) for p in (panels, lifted))
    own = before["weighting"] == "equal"
    np.testing.assert_allclose((after["alpha"] - before["alpha"])[own], 0.001, rtol=1e-9)
    np.testing.assert_allclose((after["effect"] - before["effect"])[own], 0.04, rtol=1e-9)


def test_too_few_sessions_give_a_reason(panels: dict[str, PricePanel], deals: pd.DataFrame) -> None:
    frame = calendar_time(panels, deals, replace(OPTIONS, fewest_holdings=500))
    assert frame["alpha"].isna().all()
    assert frame["reason"].tolist() == ["0 sessions hold 500 companies or more"] * 4
    assert calendar_time(panels, deals, replace(OPTIONS, horizons=())).empty


def test_weights_scale_out() -> None:
    stream = np.random.default_rng(5)
    y, x, n = stream.normal(size=80), stream.normal(size=(80, 1)), stream.integers(3, 30, 80)
    one, other = (fit_alpha(y, x, weights, True) for weights in (n, 7.0 * n))
    assert one == pytest.approx(other)


def test_the_page_shows_the_portfolios(panels: dict[str, PricePanel], deals: pd.DataFrame) -> None:
    run = full_run()
    assert horizons_section(Material.of(run)) is None
    frame = calendar_time(panels, deals, OPTIONS)
    asked = replace(run, calendar_time=frame)
    section = horizons_section(Material.of(asked))
    assert section is not None
    told = Document("", "", (section,))
    assert not [p.own_text for p in told.paragraphs if any(c.isdigit() for c in p.own_text)]
    table = calendar_time_table(Material.of(asked))
    assert table is not None
    assert len(table.rows) == 4
    effect = table.rows[0][-1]
    assert isinstance(effect, Interval)
    assert effect.estimate is not None
    assert effect.estimate.value == pytest.approx(frame["effect"].iloc[0] * 1e4)
    silent = calendar_time(panels, deals, replace(OPTIONS, fewest_holdings=500))
    quiet = calendar_time_table(Material.of(replace(run, calendar_time=silent)))
    assert quiet is not None
    assert "No answer" in quiet.notes[-1].text
