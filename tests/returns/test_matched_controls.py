"""Buy-and-hold returns over matched companies: who is matched, and what both earned."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from pipeline.core.ledger import Action
from pipeline.core.prices import PricePanel
from pipeline.core.rules import RULES
from pipeline.core.window import Window
from pipeline.returns.matched import MatchOptions, matched_controls
from pipeline.returns.panel import simple_returns
from pipeline.significance.buy_and_hold import buy_and_hold
from tests.returns.panels import panel_of_closes, weekdays

CODES = [f"S{at}" for at in range(8)]
OPTIONS = MatchOptions((Window(1, 60),), ("industry",), ("size",))
AT = 100


@pytest.fixture
def panel() -> PricePanel:
    stream = np.random.default_rng(1)
    close = 20 * np.cumprod(1 + stream.normal(0.0002, 0.02, (300, 8)), axis=0)
    level = 100 * np.cumprod(1 + stream.normal(0, 0.01, 300))
    return panel_of_closes(weekdays(300), CODES, close, level)


def deals_at(*positions: int, days: np.ndarray | None = None, **more: object) -> pd.DataFrame:
    """Deals of S0, S1, … at these sessions."""
    sessions = weekdays(300) if days is None else days
    n = len(positions)
    return pd.DataFrame(
        {
            "deal_id": [f"D{at}" for at in range(n)],
            "security": CODES[:n],
            "exchange": "XLON",
            "column": np.arange(n),
            "position": positions,
            "day_zero": sessions[list(positions)],
            **more,
        }
    )


def candidates(**more: object) -> pd.DataFrame:
    """S0 is in jam with size 5; S3 is nearest of the jam makers, then S2, S1, S4."""
    table = pd.DataFrame(
        {
            "security": CODES,
            "exchange": "XLON",
            "year": 2015.0,
            "as_of": np.datetime64("2014-12-31"),
            "column": np.arange(8),
            "industry": ["jam", "jam", "jam", "jam", "jam", "tin", "tin", "jam"],
            "size": [5.0, 8.0, 6.0, 5.5, 1.0, 5.0, 5.1, np.nan],
        }
    )
    return table.assign(**more)


def compare(panel: PricePanel, deals: pd.DataFrame, pool: pd.DataFrame | None = None,
            options: MatchOptions = OPTIONS) -> tuple[pd.Series, list]:  # fmt: skip
    """The row of the first deal and the ledger's entries."""
    table = candidates() if pool is None else pool
    frame, stage = matched_controls(deals, deals, table, {"XLON": panel}, options)
    assert stage.rows_kept == stage.rows_in == len(deals)
    return frame.iloc[0], list(stage.entries)


def without_closes(panel: PricePanel, column: int, sessions: slice) -> PricePanel:
    """The panel with these closes missing."""
    close = panel.close.copy()
    close[sessions, column] = np.nan
    return replace(panel, close=close, returns=simple_returns(close))


def growth(panel: PricePanel, column: int, first: int, last: int) -> float:
    return float(panel.close[last, column] / panel.close[first, column])


def test_the_nearest_of_the_industry_is_held(panel: PricePanel) -> None:
    row, entries = compare(panel, deals_at(AT))
    assert (row["control"], row["reason"], entries) == ("S3", "", [])
    own, control = (growth(panel, column, AT, AT + 60) for column in (0, 3))
    assert row["bhar"] == pytest.approx(own - control)
    assert row["bhar"] == pytest.approx(
        np.prod(1 + panel.returns[AT + 1 : AT + 61, 0])
        - np.prod(1 + panel.returns[AT + 1 : AT + 61, 3])
    )
    assert row["last_session"] == 60
    spread = candidates()["size"].std()
    assert row["distance"] == pytest.approx(0.5 / spread)


def test_a_company_with_a_deal_of_its_own_is_no_control(panel: PricePanel) -> None:
    deals = deals_at(AT, 20, 30, AT + 10)
    row, _ = compare(panel, deals)
    assert row["control"] == "S2"
    outside, _ = compare(panel, deals_at(AT, 20, 30, AT + 61))
    assert outside["control"] == "S3"


def test_the_counterparty_is_no_control(panel: PricePanel) -> None:
    row, _ = compare(panel, deals_at(AT, counterparty=["S3"]))
    assert row["control"] == "S2"


def test_other_years_and_exchanges_do_not_match(panel: PricePanel) -> None:
    pool = candidates()
    pool.loc[3, "year"] = 2014.0
    assert compare(panel, deals_at(AT), pool)[0]["control"] == "S2"
    pool.loc[2, "exchange"] = "XNYS"
    assert compare(panel, deals_at(AT), pool)[0]["control"] == "S1"


def test_values_not_yet_known_are_not_used(panel: PricePanel) -> None:
    pool = candidates()
    pool.loc[3, "as_of"] = weekdays(300)[AT + 1]
    assert compare(panel, deals_at(AT), pool)[0]["control"] == "S2"


def test_a_control_whose_prices_end_gives_way_to_the_next(panel: PricePanel) -> None:
    panel = without_closes(panel, 3, slice(AT + 21, None))
    row, entries = compare(panel, deals_at(AT))
    assert row["control"] == "S3, S2"
    spliced = growth(panel, 3, AT, AT + 20) * growth(panel, 2, AT + 20, AT + 60)
    assert row["control_return"] == pytest.approx(spliced - 1)
    (entry,) = entries
    assert (entry.rule, entry.action) == ("control_replaced", Action.FLAGGED)
    assert entry.rule in RULES


def test_a_gap_is_no_end(panel: PricePanel) -> None:
    panel = without_closes(panel, 3, slice(AT + 58, AT + 63))
    row, entries = compare(panel, deals_at(AT))
    assert (row["control"], entries) == ("S3", [])
    assert row["control_return"] == pytest.approx(growth(panel, 3, AT, AT + 57) - 1)


def test_both_are_held_to_the_companys_last_session(panel: PricePanel) -> None:
    panel = without_closes(panel, 0, slice(AT + 31, None))
    row, _ = compare(panel, deals_at(AT))
    assert row["last_session"] == 30
    own, control = (growth(panel, column, AT, AT + 30) for column in (0, 3))
    assert row["bhar"] == pytest.approx(own - control)


def test_a_delisting_return_is_earned_on_either_side(panel: PricePanel) -> None:
    """A return on the session after the last close."""
    stopped = without_closes(panel, 0, slice(AT + 31, None))
    stopped.returns[AT + 31, 0] = -0.3
    row, _ = compare(stopped, deals_at(AT))
    assert row["own_return"] == pytest.approx(0.7 * growth(panel, 0, AT, AT + 30) - 1)
    assert row["last_session"] == 31
    stopped = without_closes(panel, 3, slice(AT + 21, None))
    stopped.returns[AT + 21, 3] = -0.5
    row, _ = compare(stopped, deals_at(AT))
    spliced = 0.5 * growth(panel, 3, AT, AT + 20) * growth(panel, 2, AT + 21, AT + 60)
    assert row["control_return"] == pytest.approx(spliced - 1)


@pytest.mark.parametrize(
    "spoil, words",
    [
        ({"industry": ["jam", *["tin"] * 7]}, "no company like it"),
        ({"size": [np.nan, *[1.0] * 7]}, "a value to match by is missing"),
        ({"security": ["X0", *CODES[1:]]}, "not among the candidates"),
    ],
)
def test_a_deal_without_a_control_is_in_the_ledger(
    spoil: dict[str, object], words: str, panel: PricePanel
) -> None:
    row, (entry,) = compare(panel, deals_at(AT), candidates(**spoil))
    assert words in row["reason"]
    assert np.isnan(row["bhar"])
    assert (entry.deal, entry.rule, entry.action) == ("D0", "no_control", Action.FLAGGED)


def test_the_history_must_reach_the_end(panel: PricePanel) -> None:
    row, _ = compare(panel, deals_at(240))
    assert "price history ends" in row["reason"]
    panel = without_closes(panel, 0, slice(AT, AT + 1))
    assert "no price on the session before" in compare(panel, deals_at(AT))[0]["reason"]


def test_the_mean_with_its_tests() -> None:
    """scipy's one-sample t; deals without a control are counted and left out."""
    bhar = np.append(np.random.default_rng(2).exponential(0.2, 40) - 0.15, np.nan)
    frame = pd.DataFrame(
        {
            "window_start": 1,
            "window_end": 250,
            "bhar": bhar,
            "own_return": bhar + 0.1,
            "control_return": 0.1,
        }
    )
    (row,) = buy_and_hold(frame, 0.9, 5).to_dict("records")
    known = stats.ttest_1samp(bhar[:-1], 0.0)
    assert (row["deals"], row["n"]) == (41, 40)
    assert row["statistic"] == pytest.approx(known.statistic)
    assert row["p_value"] == pytest.approx(known.pvalue)
    interval = known.confidence_interval(0.9)
    assert [row["ci_low"], row["ci_high"]] == pytest.approx(list(interval))
    assert row["skewness"] == pytest.approx(stats.skew(bhar[:-1], bias=False))
    assert 0 < row["skewness_adjusted_p"] <= 1
    alone = buy_and_hold(frame.iloc[:1], 0.9, 5).iloc[0]
    assert np.isnan(
        alone[["ci_low", "statistic", "p_value", "skewness_adjusted_p"]].astype(float)
    ).all()
