"""Placing deals in prices, and the screens that decide which are measured.

The thresholds are those of the study file or of the screens; common practice, no source.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.findings import Severity
from pipeline.core.ledger import Action, StageLedger
from pipeline.core.prices import Booleans, PricePanel
from pipeline.core.window import Window
from pipeline.returns.events import (
    EventOptions,
    locate,
    locate_candidates,
    located_events,
    masked_sessions,
)
from pipeline.returns.expected import market_model
from pipeline.returns.measure import measure
from pipeline.returns.repeats import settle_repeats
from pipeline.returns.screens import jumps_near_events, screen_estimation, screen_event
from pipeline.returns.sessions import Sessions, sessions_between
from tests.returns.panels import panel_of_closes

HEADLINE = Window(-1, 1)
OPTIONS = EventOptions(
    estimation=Window(-120, -21),
    headline=HEADLINE,
    span=Window(-10, 10),
    minimum_observations=80,
    cutoff_minutes=0,
    mask_sessions=5,
    confounding_days=1,
)
CODES = ("A", "B", "C", "D", "E", "F")


@pytest.fixture(scope="module")
def calendar() -> Sessions:
    return sessions_between("XLON", "2018-01-02", "2019-12-31")


def prices(calendar: Sessions, seed: int = 4) -> PricePanel:
    stream = np.random.default_rng(seed)
    days = calendar.days[:-20]
    market = stream.normal(0, 0.008, len(days))
    moves = market[:, None] + stream.normal(0, 0.01, (len(days), len(CODES)))
    return panel_of_closes(days, CODES, 100 * np.cumprod(1 + moves, axis=0), np.cumprod(1 + market))


@pytest.fixture(scope="module")
def panel(calendar: Sessions) -> PricePanel:
    return prices(calendar)


def deals(calendar: Sessions, *rows: tuple[str, str, int]) -> pd.DataFrame:
    """Deals at 10:00 in London of the session at the position named."""
    days = [calendar.days[position] for _, _, position in rows]
    return pd.DataFrame(
        {
            "deal_id": [deal for deal, _, _ in rows],
            "security": [security for _, security, _ in rows],
            "exchange": "XLON",
            "announced_utc": pd.to_datetime([f"{day}T10:00" for day in days], utc=True),
            "announced_date": pd.to_datetime(days).astype("datetime64[s]"),
            "earnings_release": pd.Series(pd.NaT, index=range(len(rows)), dtype="datetime64[s]"),
        }
    )


def found(
    table: pd.DataFrame, panel: PricePanel, calendar: Sessions
) -> tuple[pd.DataFrame, StageLedger]:
    return locate(table, {"XLON": panel}, {"XLON": calendar}, OPTIONS)


def said(ledger: StageLedger) -> list[tuple[str, str, Action]]:
    return [(entry.deal, entry.rule, entry.action) for entry in ledger.entries]


def test_deals_are_placed_and_losses_are_named(panel: PricePanel, calendar: Sessions) -> None:
    last = len(panel.sessions) - 1
    table = deals(
        calendar, ("D1", "B", 200), ("D2", "Z", 210), ("D3", "C", 0), ("D4", "C", last),
        ("D5", "A", last - 1), ("D6", "A", 2), ("D7", "A", 1),
    )  # fmt: skip
    located, ledger = found(table, panel, calendar)
    assert located["deal_id"].tolist() == ["D1", "D5", "D6"]
    assert located["position"].tolist() == [200, last - 1, 2]
    assert located["column"].tolist() == [1, 0, 0]
    assert located["timing"].tolist() == ["during the session"] * 3
    assert (located["day_zero"].to_numpy() == panel.sessions[[200, last - 1, 2]]).all()
    assert all("while XLON was open" in text for text in located["day_zero_reason"])
    assert said(ledger) == [
        ("D2", "no_prices", Action.DROPPED),
        ("D3", "outside_history", Action.DROPPED),
        ("D4", "outside_history", Action.DROPPED),
        ("D7", "outside_history", Action.DROPPED),  # the first session has no return
    ]
    assert ledger.rows_in == 7
    assert ledger.rows_kept == len(located)
    assert [event.deal for event in located_events(located)] == ["D1", "D5", "D6"]


def test_a_date_beyond_the_calendar_leaves_with_an_entry(
    panel: PricePanel, calendar: Sessions
) -> None:
    table = deals(calendar, ("D1", "A", 200), ("D2", "B", 200), ("D3", "C", 200))
    table.loc[0, "announced_utc"] += pd.Timedelta(days=3000)
    table.loc[1, "announced_utc"] = pd.NaT
    table.loc[1, "announced_date"] = pd.Timestamp("2031-05-05")
    located, ledger = found(table, panel, calendar)
    assert located["deal_id"].tolist() == ["D3"]
    assert said(ledger) == [(deal, "outside_history", Action.DROPPED) for deal in ("D1", "D2")]


def test_two_exchanges_keep_the_order_of_the_list(calendar: Sessions) -> None:
    new_york = sessions_between("XNYS", "2018-01-02", "2019-12-31")
    table = deals(calendar, ("D1", "A", 100), ("D2", "A", 101), ("D3", "A", 102))
    table.loc[[0, 2], "exchange"] = "XNYS"
    panels = {"XLON": prices(calendar), "XNYS": prices(new_york)}
    calendars = {"XLON": calendar, "XNYS": new_york}
    located, _ = locate(table, panels, calendars, OPTIONS)
    assert located["deal_id"].tolist() == ["D1", "D2", "D3"]
    for exchange, position, day in located[["exchange", "position", "day_zero"]].itertuples(
        index=False
    ):
        assert panels[exchange].sessions[position] == np.datetime64(day, "D")


def test_moved_and_dateless_announcements_are_noted(panel: PricePanel, calendar: Sessions) -> None:
    table = deals(calendar, ("D1", "A", 100), ("D2", "B", 100))
    table.loc[0, "announced_utc"] += pd.Timedelta(hours=9)
    table["announced_utc"] = table["announced_utc"].where(table["deal_id"] != "D2")
    located, ledger = found(table, panel, calendar)
    assert located["position"].tolist() == [101, 100]
    assert said(ledger) == [
        ("D1", "moved_to_session", Action.CHANGED),
        ("D2", "time_unknown", Action.FLAGGED),
    ]


@pytest.mark.parametrize(("apart", "kept"), [(2, ["D1", "D4"]), (3, ["D1", "D2", "D4"])])
def test_the_first_of_two_deals_whose_windows_meet(
    apart: int, kept: list[str], panel: PricePanel, calendar: Sessions
) -> None:
    """Windows of three sessions meet when day zeros are fewer than three apart."""
    table = deals(calendar, ("D2", "A", 200 + apart), ("D4", "B", 201), ("D1", "A", 200))
    located, _ = found(table, panel, calendar)
    left, ledger = settle_repeats(located, HEADLINE)
    assert sorted(left["deal_id"]) == kept
    assert ledger.rows_kept == len(left)
    if apart == 2:
        (entry,) = ledger.entries
        assert (entry.deal, entry.rule) == ("D2", "overlapping_event")
        assert entry.value == "2 sessions after D1"


def test_a_chain_of_deals_is_measured_from_the_last_one_kept(
    panel: PricePanel, calendar: Sessions
) -> None:
    """The second falls with the first; the third meets the second alone and stays."""
    table = deals(calendar, ("D1", "A", 200), ("D2", "A", 202), ("D3", "A", 204))
    located, _ = found(table, panel, calendar)
    left, _ = settle_repeats(located, HEADLINE)
    assert left["deal_id"].tolist() == ["D1", "D3"]


def test_sessions_around_another_deal_are_masked(panel: PricePanel, calendar: Sessions) -> None:
    table = deals(calendar, ("D1", "A", 200), ("D2", "A", 260), ("D3", "B", 250))
    located, _ = found(table, panel, calendar)
    masked = masked_sessions(located, located, OPTIONS.estimation, 5, {"XLON": panel})
    sessions = np.arange(-120, -20)
    # D1 lies 60 sessions before D2: sessions -65 to -55 of D2. D2 lies after D1's window.
    np.testing.assert_array_equal(masked[1], (sessions >= -65) & (sessions <= -55))
    assert not masked[[0, 2]].any()


def test_a_deal_on_another_exchange_is_masked_by_its_date(
    panel: PricePanel, calendar: Sessions
) -> None:
    """Its place among the sessions there says nothing of the sessions here."""
    located, _ = found(deals(calendar, ("D1", "A", 200), ("D2", "A", 260)), panel, calendar)
    own = masked_sessions(located, located, OPTIONS.estimation, 5, {"XLON": panel})
    elsewhere = located.assign(exchange="XNYS", position=located["position"] - 17)
    other = masked_sessions(located, elsewhere, OPTIONS.estimation, 5, {"XLON": panel})
    np.testing.assert_array_equal(other, own)
    assert own[1].sum() == 11


def screened(
    panel: PricePanel, calendar: Sessions, *rows: tuple[str, str, int], masked: bool = False
) -> tuple[Booleans, StageLedger, AbnormalReturns]:
    located, _ = locate(deals(calendar, *rows), {"XLON": panel}, {"XLON": calendar}, OPTIONS)
    mask = masked_sessions(located, located, OPTIONS.estimation, 5, {"XLON": panel})
    if not masked:
        mask = np.zeros_like(mask)
    panels = {"XLON": panel}
    abnormal = measure(
        "market_model", market_model, located, mask, panels, OPTIONS.estimation, OPTIONS.span
    )
    keep, ledger = screen_estimation(located, abnormal, panels, mask, OPTIONS)
    return keep, ledger, abnormal


def with_closes(panel: PricePanel, close: np.ndarray) -> PricePanel:
    level = np.cumprod(1 + np.nan_to_num(panel.benchmark))
    return panel_of_closes(panel.sessions, panel.securities, close, level)


def test_a_jump_near_the_event_must_be_declared(panel: PricePanel, calendar: Sessions) -> None:
    """A split or the news itself: neither is dropped without a word."""
    close = panel.close.copy()
    close[200:, 1] *= 0.5
    panels = {"XLON": with_closes(panel, close)}
    located, _ = locate(deals(calendar, ("DB", "B", 200)), panels, {"XLON": calendar}, OPTIONS)
    (finding,) = jumps_near_events(located, panels, OPTIONS)
    assert (finding.rule, finding.severity) == ("suspected_split", Severity.ERROR)
    assert str(panel.sessions[200]) in finding.got
    real = replace(OPTIONS, real_jumps=frozenset({"DB"}))
    assert jumps_near_events(located, panels, real) == []


def test_estimation_windows_that_will_not_do(panel: PricePanel, calendar: Sessions) -> None:
    close = panel.close.copy()
    close[:130, 0] = np.nan  # 50 returns before the deal at 200
    close[150:, 1] *= 0.5  # an unadjusted split in the estimation window
    close[100:170, 2] = close[100, 2]  # 69 unchanged prices of 100
    close[150:175, 3] = close[150, 3]  # 24 of 100
    stale = with_closes(panel, close)
    rows = [(f"D{code}", code, 200) for code in "ABCDE"]
    keep, ledger, _ = screened(stale, calendar, *rows)
    assert keep.tolist() == [False, False, False, True, True]
    assert said(ledger) == [
        ("DA", "short_estimation", Action.DROPPED),
        ("DB", "suspected_split", Action.DROPPED),
        ("DC", "thin_trading", Action.DROPPED),
        ("DD", "thin_trading", Action.FLAGGED),
        ("DD", "stale_price", Action.FLAGGED),
    ]
    values = [entry.value for entry in ledger.entries]
    assert values == ["49 returns", str(panel.sessions[150]), "69% unchanged prices",
                      "24% unchanged prices", "one price for 25 sessions"]  # fmt: skip
    assert ledger.rows_kept == keep.sum()


@pytest.mark.parametrize(("missing", "flagged"), [(4, False), (5, True)])
def test_gaps_of_an_estimation_window_are_flagged(
    missing: int, flagged: bool, panel: PricePanel, calendar: Sessions
) -> None:
    """More than a twentieth; a missing price costs its own return and the next."""
    close = panel.close.copy()
    close[100 : 100 + missing, 0] = np.nan
    keep, ledger, abnormal = screened(with_closes(panel, close), calendar, ("D1", "A", 200))
    assert keep.all()
    assert abnormal.observations.tolist() == [100 - missing - 1]
    wanted = [("D1", "gaps_in_estimation", Action.FLAGGED)] if flagged else []
    assert said(ledger) == wanted


def test_a_split_far_from_the_windows_does_no_harm(panel: PricePanel, calendar: Sessions) -> None:
    close = panel.close.copy()
    close[215:, 0] *= 0.5
    keep, ledger, _ = screened(with_closes(panel, close), calendar, ("D1", "A", 200))
    assert keep.all()
    assert not ledger.entries


def test_a_benchmark_that_stands_still_is_named(panel: PricePanel, calendar: Sessions) -> None:
    flat = panel_of_closes(
        panel.sessions, panel.securities, panel.close, np.full(len(panel.sessions), 7.0)
    )
    keep, ledger, _ = screened(flat, calendar, ("D1", "A", 200))
    assert not keep.any()
    assert said(ledger) == [("D1", "benchmark_gap", Action.DROPPED)]


def test_masked_sessions_are_noted_and_may_cost_the_deal(
    panel: PricePanel, calendar: Sessions
) -> None:
    rows = [("D1", "A", 200), ("D2", "A", 260)]
    keep, ledger, abnormal = screened(panel, calendar, *rows, masked=True)
    assert keep.all()
    assert said(ledger) == [("D2", "masked_sessions", Action.CHANGED)]
    assert ledger.entries[0].value == "11 sessions left out"
    assert abnormal.observations.tolist() == [100, 89]


def test_the_headline_window_needs_all_its_days(panel: PricePanel, calendar: Sessions) -> None:
    close = panel.close.copy()
    close[201, 0] = np.nan  # a day of the window, and the return after it
    close[205:, 1] = np.nan  # the share stops trading
    close[203:, 2] *= 1.7  # a jump that is no whole factor
    rows = [(f"D{code}", code, 200) for code in "ABCD"]
    panels = {"XLON": with_closes(panel, close)}
    _, _, abnormal = screened(panels["XLON"], calendar, *rows)
    located, _ = locate(deals(calendar, *rows), panels, {"XLON": calendar}, OPTIONS)
    keep, ledger = screen_event(abnormal, HEADLINE, located, panels)
    assert keep.tolist() == [False, True, True, True]
    assert said(ledger) == [
        ("DA", "event_missing", Action.DROPPED),
        ("DB", "delisted", Action.FLAGGED),
        ("DC", "large_return", Action.FLAGGED),
    ]
    assert ledger.entries[0].value == "1 sessions without a return"
    assert ledger.entries[1].value == "last price on day +4"
    assert ledger.rows_kept == keep.sum()


def test_history_that_ends_is_no_delisting(panel: PricePanel, calendar: Sessions) -> None:
    """The whole file stops at day +4: nothing is known of the share."""
    located, _ = found(deals(calendar, ("D1", "A", 200)), panel, calendar)
    mask = np.zeros((1, 100), dtype=np.bool_)
    cut = replace(
        panel,
        sessions=panel.sessions[:205],
        **{name: getattr(panel, name)[:205] for name in ("close", "volume", "returns")},
        benchmark=panel.benchmark[:205],
    )
    abnormal = measure(
        "market_model", market_model, located, mask, {"XLON": cut}, OPTIONS.estimation, OPTIONS.span
    )
    keep, ledger = screen_event(abnormal, HEADLINE, located, {"XLON": cut})
    assert keep.all()
    assert not ledger.entries


def test_candidates_are_located_by_their_own_date(panel: PricePanel) -> None:
    table = pd.DataFrame(
        {
            "security": ["B", "Z", "C"],
            "exchange": ["XLON", "XLON", "XNYS"],
            "as_of": pd.to_datetime(["2018-06-30", "2018-06-29", "2018-06-29"]),
        }
    )
    located = locate_candidates(table, {"XLON": panel})
    assert located["column"].tolist() == [1, -1, -1]
    first = located["position"].iloc[0]
    assert str(panel.sessions[first]) == "2018-07-02"  # 30 June 2018 was a Saturday
