"""Peers: who they are for each event, and the model that compares with them."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm

from pipeline.core.ledger import Action
from pipeline.core.prices import PricePanel
from pipeline.core.rules import RULES
from pipeline.core.window import Window
from pipeline.returns.expected import peer_adjusted
from pipeline.returns.fit import Events, fit_events
from pipeline.returns.peers import (
    PeerBook,
    PeerReturns,
    by_group,
    by_pair,
    few_peers,
    peer_book,
)
from tests.returns.panels import ESTIMATION, SPAN, invented_panel

JAM, TIN = frozenset(f"S{at:02d}" for at in range(8)), frozenset(("S08", "S09"))
PEERS = {code: group for group in (JAM, TIN) for code in group}
AT = 200


@pytest.fixture(scope="module")
def panel() -> PricePanel:
    """Ten shares, one of them listed late and one with a gap."""
    made = invented_panel(securities=10)
    returns = made.returns.copy(order="F")
    returns[:120, 6] = np.nan
    returns[150:156, 5] = np.nan
    return replace(made, returns=returns)


@pytest.fixture(scope="module")
def book() -> PeerBook:
    """S00's deal with S01; S02 has one nine sessions later, S03 one just outside the windows."""
    located = pd.DataFrame(
        {
            "security": ["S00", "S02", "S03", "S09"],
            "exchange": "XLON",
            "position": [AT, AT + 9, AT + SPAN.end + 1, AT],
            "counterparty": ["S01", "", "", ""],
        }
    )
    return peer_book(PEERS, located, SPAN, 2)


def test_the_peer_return_leaves_out_whom_it_must(panel: PricePanel, book: PeerBook) -> None:
    at = np.arange(AT - 120, AT + 11)[None, :]
    found = PeerReturns(panel, book)(np.array([0]), np.array([AT]), at)[0]
    # Not S00 itself, its counterparty S01, nor S02 with a deal inside the windows.
    by_hand = pd.DataFrame(panel.returns[at[0]][:, 3:8]).mean(axis=1, skipna=True)
    np.testing.assert_allclose(found, by_hand, rtol=1e-12)


def test_another_event_of_the_company_has_other_peers(panel: PricePanel, book: PeerBook) -> None:
    """Far from the deals only the company itself is left out."""
    at = np.arange(280, 300)[None, :]
    found = PeerReturns(panel, book)(np.array([0]), np.array([290]), at)[0]
    np.testing.assert_allclose(found, panel.returns[at[0]][:, 1:8].mean(axis=1), rtol=1e-12)


def test_the_model_is_a_regression_on_market_and_peers(panel: PricePanel, book: PeerBook) -> None:
    """statsmodels with the hand-made peer series: parameters, s², forecast error, CAR."""
    model = peer_adjusted(panel, book)
    events = Events(np.array([0]), np.array([AT]), np.zeros((1, len(ESTIMATION)), dtype=np.bool_))
    found = fit_events("peer_adjusted", ("D",), model, panel, events, ESTIMATION, SPAN)
    rows = np.arange(AT + ESTIMATION.start, AT + ESTIMATION.end + 1)
    days = np.arange(AT - 1, AT + 2)

    def regressors(at: np.ndarray) -> np.ndarray:
        peers = pd.DataFrame(panel.returns[at][:, 3:8]).mean(axis=1)
        return np.column_stack([np.ones(len(at)), panel.benchmark[at], peers])

    fit = sm.OLS(panel.returns[rows, 0], regressors(rows)).fit()
    np.testing.assert_allclose(found.parameters[0], fit.params, rtol=1e-8)
    assert found.residual_variance[0] == pytest.approx(fit.mse_resid, rel=1e-9)
    assert found.degrees_of_freedom[0] == fit.df_resid
    expected = fit.predict(regressors(days))
    window = Window(-1, 1)
    assert found.car(window)[0] == pytest.approx((panel.returns[days, 0] - expected).sum())
    total = regressors(days).sum(axis=0)
    variance = 3 * fit.mse_resid + total @ fit.cov_params() @ total
    assert found.car_variance(window)[0] == pytest.approx(variance, rel=1e-8)


def test_a_shock_to_the_industry_is_no_news_of_the_deal(panel: PricePanel, book: PeerBook) -> None:
    """What all jam makers gain on day zero is expected of S00 by its slope on peers."""
    lifted = panel.returns.copy(order="F")
    lifted[AT, :8] += 0.05
    none = np.zeros((1, len(ESTIMATION)), dtype=np.bool_)
    events = Events(np.array([0]), np.array([AT]), none)
    before, after = (
        fit_events("p", ("D",), peer_adjusted(p, book), p, events, ESTIMATION, SPAN)
        for p in (panel, replace(panel, returns=lifted))
    )
    gained = after.car(Window(0, 0)) - before.car(Window(0, 0))
    assert gained[0] == pytest.approx(0.05 * (1 - before.parameters[0, 2]), rel=1e-9)


def test_events_with_too_few_peers(panel: PricePanel, book: PeerBook) -> None:
    located = pd.DataFrame(
        {
            "deal_id": ["A", "B", "C"],
            "exchange": "XLON",
            "column": [0, 9, 0],
            "position": [AT, AT, 290],
        }
    )
    keep, stage = few_peers(located, {"XLON": panel}, book, Action.DROPPED)
    assert keep.tolist() == [True, False, True]
    (entry,) = stage.entries
    assert (entry.deal, entry.rule, entry.value) == ("B", "few_peers", "1 peers")
    assert entry.rule in RULES
    flagged, stage = few_peers(located, {"XLON": panel}, book, Action.FLAGGED)
    assert flagged.all()
    assert stage.rows_kept == 3
    at = np.arange(100, 120)[None, :]
    assert np.isnan(PeerReturns(panel, book)(np.array([9]), np.array([AT]), at)).all()


def test_groups_come_from_the_first_table_that_has_one() -> None:
    deals = pd.DataFrame({"security": ["A", "B", "X"], "industry": ["tin", "jam", "jam"]})
    candidates = pd.DataFrame(
        {
            "security": ["A", "A", "C", "D"],
            "as_of": pd.to_datetime(["2020-12-31", "2019-12-31", "2019-12-31", "2019-12-31"]),
            "industry": ["jam", "tin", "jam", ""],
        }
    )
    found = by_group(candidates, deals, column="industry")
    assert found["A"] == {"A", "B", "C", "X"}
    assert "D" not in found
    assert by_group(None, deals, column="industry")["A"] == {"A"}


def test_peers_named_in_pairs() -> None:
    pairs = pd.DataFrame({"security": ["A", "A", "B"], "peer": ["C", "D", "A"]})
    assert by_pair(pairs) == {"A": {"C", "D"}, "B": {"A"}}
