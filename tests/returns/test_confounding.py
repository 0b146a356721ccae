"""Other news near an announcement: flagged, left out, or taken out session by session.

A dummy for one session takes up its abnormal return whole (Karafiath 1988, Financial Review 23,
the dummy-variable form of an event study; read from memory). It is held here against a regression
with such dummies over the whole history, made by statsmodels.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm

from pipeline.core.ledger import Action, StageLedger
from pipeline.core.prices import PricePanel
from pipeline.core.window import Window
from pipeline.returns.confounding import news_days, treat_news, without_news
from pipeline.returns.expected import market_model
from pipeline.returns.measure import measure
from pipeline.returns.sessions import Sessions, sessions_between
from tests.returns.test_locating_events import OPTIONS, prices

EMPTY = StageLedger("day zero", 3)


@pytest.fixture(scope="module")
def calendar() -> Sessions:
    return sessions_between("XLON", "2018-01-02", "2019-12-31")


@pytest.fixture(scope="module")
def panel(calendar: Sessions) -> PricePanel:
    return prices(calendar)


def located(panel: PricePanel, releases: dict[str, int] | None = None) -> pd.DataFrame:
    """Three deals at session 200; an earnings release at a session for each deal named."""
    dates = [
        panel.sessions[releases[deal]] if releases and deal in releases else np.datetime64("NaT")
        for deal in ("D1", "D2", "D3")
    ]
    return pd.DataFrame(
        {
            "deal_id": ["D1", "D2", "D3"],
            "security": ["A", "B", "C"],
            "exchange": "XLON",
            "column": [0, 1, 2],
            "position": 200,
            "earnings_release": np.array(dates, dtype="datetime64[s]"),
        },
        index=[7, 3, 5],
    )


def news(panel: PricePanel, *rows: tuple[str, int, str]) -> pd.DataFrame:
    return pd.DataFrame(
        {
            "security": [code for code, _, _ in rows],
            "date": np.array([panel.sessions[at] for _, at, _ in rows], dtype="datetime64[s]"),
            "kind": [kind for _, _, kind in rows],
        }
    )


@pytest.mark.parametrize("apart", [-2, -1, 0, 1, 2])
def test_an_earnings_release_nearby_is_flagged(apart: int, panel: PricePanel) -> None:
    deals = located(panel, {"D1": 200 + apart})
    found = news_days(deals, {"XLON": panel}, None)
    kept, ledger = treat_news(deals, EMPTY, found, OPTIONS)
    assert kept.equals(deals)
    said = [(e.deal, e.rule, e.action, e.value, e.threshold) for e in ledger.entries]
    near = ("D1", "confounded", Action.FLAGGED, f"{apart:+d} sessions", "1 sessions")
    assert said == ([near] if abs(apart) <= 1 else [])


def test_news_of_a_weekend_counts_for_the_session_after(panel: PricePanel) -> None:
    friday = next(at for at in range(200, 220) if pd.Timestamp(panel.sessions[at]).day_of_week == 4)
    deals = located(panel).assign(position=friday)
    table = news(panel, ("A", friday, "guidance"))
    table["date"] += pd.Timedelta(days=1)
    assert news_days(deals, {"XLON": panel}, table).distance.tolist() == [1]


def test_other_news_has_a_rule_of_its_own(panel: PricePanel) -> None:
    deals = located(panel, {"D1": 201})
    table = news(
        panel, ("A", 199, "guidance"), ("B", 200, "dividend"), ("C", 205, "index change"),
        ("Z", 200, "dividend"),
    )  # fmt: skip
    _, ledger = treat_news(deals, EMPTY, news_days(deals, {"XLON": panel}, table), OPTIONS)
    assert [(e.deal, e.rule, e.value) for e in ledger.entries] == [
        ("D1", "confounded", "+1 sessions"),
        ("D1", "other_news", "-1 sessions (guidance)"),
        ("D2", "other_news", "+0 sessions (dividend)"),
    ]
    assert {entry.action for entry in ledger.entries} == {Action.FLAGGED}


def test_excluded_deals_leave_once(panel: PricePanel) -> None:
    deals = located(panel, {"D1": 201})
    table = news(panel, ("A", 199, "guidance"), ("B", 240, "dividend"))
    options = replace(OPTIONS, confounding="exclude")
    kept, ledger = treat_news(deals, EMPTY, news_days(deals, {"XLON": panel}, table), options)
    assert kept["deal_id"].tolist() == ["D2", "D3"]
    assert [entry.deal for entry in ledger.dropped] == ["D1"]
    assert ledger.rows_kept == len(kept)


def test_under_a_dummy_only_news_on_day_zero_costs_the_deal(panel: PricePanel) -> None:
    deals = located(panel, {"D1": 201, "D2": 200})
    options = replace(OPTIONS, confounding="dummy")
    found = news_days(deals, {"XLON": panel}, None)
    kept, ledger = treat_news(deals, EMPTY, found, options)
    assert kept["deal_id"].tolist() == ["D1", "D3"]
    assert [(e.deal, e.action) for e in ledger.entries] == [
        ("D1", Action.CHANGED),
        ("D2", Action.DROPPED),
    ]
    mask = found.mask(kept, Window(-2, 2))
    assert mask.tolist() == [[False, False, False, True, False], [False] * 5]


def test_a_dummy_takes_up_its_session_whole(panel: PricePanel) -> None:
    """CAR and its variance against one regression with a dummy a session of the event window."""
    deals = located(panel).loc[[7]]
    table = news(panel, ("A", 201, "guidance"), ("A", 150, "dividend"))
    found = news_days(deals, {"XLON": panel}, table)
    masked = found.mask(deals, OPTIONS.estimation)
    assert masked.sum() == 1
    abnormal = measure(
        "market_model", market_model, deals, masked, {"XLON": panel}, OPTIONS.estimation,
        OPTIONS.span,
    )  # fmt: skip
    left = without_news(abnormal, found.mask(deals, OPTIONS.span))
    window = Window(-1, 1)
    assert left.complete(window).all()
    assert np.isfinite(left.returns[0]).sum() == np.isfinite(abnormal.returns[0]).sum() - 1

    used = np.r_[80:180, 199:202]  # estimation sessions -120 to -21, then the window
    dummies = np.zeros((len(used), 4))
    for column, session in enumerate((150, 199, 200, 201)):
        dummies[used == session, column] = 1
    x = np.column_stack([np.ones(len(used)), panel.benchmark[used], dummies])
    fit = sm.OLS(panel.returns[used, 0], x).fit()
    assert left.car(window)[0] == pytest.approx(fit.params[3] + fit.params[4], rel=1e-9)
    weights = np.array([0, 0, 0, 1, 1, 0])
    variance = weights @ fit.cov_params() @ weights
    assert left.car_variance(window)[0] == pytest.approx(variance, rel=1e-9)


def test_a_window_of_nothing_but_news_is_not_whole(panel: PricePanel) -> None:
    deals = located(panel)
    masked = np.zeros((3, len(OPTIONS.estimation)), dtype=np.bool_)
    abnormal = measure(
        "market_model", market_model, deals, masked, {"XLON": panel}, OPTIONS.estimation,
        OPTIONS.span,
    )  # fmt: skip
    table = news(panel, ("A", 201, "guidance"))
    left = without_news(
        abnormal, news_days(deals, {"XLON": panel}, table).mask(deals, abnormal.span)
    )
    assert left.complete(Window(1, 1)).tolist() == [False, True, True]
    assert left.complete(Window(0, 1)).all()
    assert left.counted(Window(1, 1))[0, 0] == 0
    assert left.select(np.array([False, True, True])).left_out is not None
    assert without_news(abnormal, np.zeros_like(abnormal.returns, dtype=np.bool_)) is abnormal
