"""Sessions and their times against facts that exchanges and newspapers published.

The facts and their sources are in ``events.json``. ``Sessions`` gives instants in UTC; they are
turned back into the exchange's own clock before they are compared.
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from pipeline.returns.sessions import Sessions, sessions_between

CASES: dict[str, Any] = json.loads(Path(__file__).with_name("events.json").read_text())["cases"]
FACTS = CASES["core_sessions"]["expected"]
DATED = [key for key in FACTS if " " in key]
CODES = {"NYSE": "XNYS", "LSE": "XLON", "JPX": "XTKS"}
CLOCKS = {"XNYS": "America/New_York", "XLON": "Europe/London", "XTKS": "Asia/Tokyo"}


def local(instants: np.ndarray, zone: str) -> list[str]:
    """UTC instants as HH:MM on the clock of ``zone``."""
    stamps = pd.DatetimeIndex(instants.astype("datetime64[ns]")).tz_localize("UTC")
    return stamps.tz_convert(zone).strftime("%H:%M").tolist()


def around(exchange: str, day: str) -> Sessions:
    at = pd.Timestamp(day)
    return sessions_between(exchange, f"{at - pd.Timedelta(days=7):%Y-%m-%d}", f"{at:%Y-%m-%d}")


@pytest.mark.parametrize("key", DATED)
def test_open_or_closed_and_when(key: str) -> None:
    """Closures of 2001 and 2012, half days, Tokyo's longer day of 5 November 2024."""
    name, day = key.split(" ")
    exchange = CODES[name]
    sessions = around(exchange, day)
    assert sessions.zone == CLOCKS[exchange]
    fact = FACTS[key]["value"]
    is_session = bool(np.isin(np.datetime64(day), sessions.days))
    assert is_session == (fact is not None)
    if fact is not None:
        assert local(sessions.opens[-1:], sessions.zone) == [fact["market_open"]]
        assert local(sessions.closes[-1:], sessions.zone) == [fact["market_close"]]


def test_new_york_holidays_of_2024() -> None:
    sessions = sessions_between("XNYS", "2024-01-01", "2024-12-31")
    weekdays = pd.bdate_range("2024-01-01", "2024-12-31").to_numpy().astype("datetime64[D]")
    closed = np.setdiff1d(weekdays, sessions.days)
    assert closed.astype(str).tolist() == FACTS["NYSE_holidays_2024"]["value"]


def test_new_york_early_closes_of_two_years() -> None:
    sessions = sessions_between("XNYS", "2023-01-01", "2024-12-31")
    early = np.array(local(sessions.closes, sessions.zone)) < "16:00"
    assert sessions.days[early].astype(str).tolist() == FACTS["NYSE_early_2023_2024"]["value"]


def test_thirty_three_years_of_prices_lie_on_the_sessions() -> None:
    """Dates of real closes, as skfolio carries them: an exchange's own record of when it opened."""
    datasets = pytest.importorskip("skfolio.datasets", reason="test extra not installed")
    traded = datasets.load_sp500_dataset().index.to_numpy().astype("datetime64[D]")
    sessions = sessions_between("XNYS", str(traded[0]), str(traded[-1]))
    assert len(sessions.days) == 8313
    np.testing.assert_array_equal(sessions.days, traded)


def test_hong_kong_closed_for_the_storms_of_september_2023() -> None:
    """Typhoon Saola on the 1st, the black rainstorm of the 8th: the exchange's own notices.

    Value from memory; listing codes map to the calendar that has these closures.
    """
    sessions = sessions_between("XHKG", "2023-08-31", "2023-09-11")
    assert sessions.days.astype(str).tolist() == [
        "2023-08-31", "2023-09-04", "2023-09-05", "2023-09-06", "2023-09-07", "2023-09-11",
    ]  # fmt: skip


@pytest.mark.parametrize(
    ("exchange", "day"),
    [
        ("XNYS", "2001-09-12"),  # after the attacks of 11 September
        ("XNYS", "2012-10-29"),  # storm Sandy
        ("XNYS", "2018-12-05"),  # day of mourning
        ("XNYS", "2025-01-09"),  # day of mourning
        ("XLON", "2022-09-19"),  # state funeral
        ("XLON", "2023-05-08"),  # coronation
        ("XTKS", "2020-10-01"),  # failure of the trading system
        ("XHKG", "2020-10-13"),  # typhoon
        ("XHKG", "2021-10-13"),  # typhoon
        ("XHKG", "2023-09-01"),  # typhoon
        ("XHKG", "2023-09-08"),  # rainstorm
        ("XHKG", "2024-09-06"),  # typhoon
    ],
)
def test_closures_out_of_turn_are_known_as_such(exchange: str, day: str) -> None:
    """Each exchange's own notice of the day; read from memory."""
    sessions = sessions_between(exchange, f"{day[:4]}-01-01", f"{day[:4]}-12-31")
    assert np.datetime64(day) not in sessions.days
    assert np.datetime64(day) in sessions.unplanned
    assert not np.isin(sessions.unplanned, sessions.days).any()


@pytest.mark.parametrize(
    ("exchange", "day", "zone"),
    [
        ("XNYS", "2023-12-25", "America/New_York"),
        ("XLON", "2023-12-26", "Europe/London"),
        ("XHKG", "2023-01-24", "Asia/Shanghai"),  # Lunar New Year; the zone's clock is the same
    ],
)
def test_yearly_holidays_are_in_turn(exchange: str, day: str, zone: str) -> None:
    sessions = sessions_between(exchange, "2023-01-01", "2023-12-31")
    assert sessions.zone == zone
    assert np.datetime64(day) not in {*sessions.days, *sessions.unplanned}


@pytest.mark.parametrize(
    ("exchange", "day", "clock"),
    [
        # Half days: the day after Thanksgiving in New York, Christmas Eve in London.
        ("XNYS", "2022-11-25", "13:00"),
        ("XLON", "2020-12-24", "12:30"),
        # The last session of Tokyo's shorter day, and the first of the longer one.
        ("XTKS", "2024-11-01", "15:00"),
        ("XTKS", "2024-11-05", "15:30"),
        # Hong Kong's half day on New Year's Eve.
        ("XHKG", "2024-12-31", "12:00"),
    ],
)
def test_the_close_of_a_day_that_is_not_like_others(exchange: str, day: str, clock: str) -> None:
    """Trading calendars of the exchanges; New York's and Tokyo's as in ``events.json``, London's
    and Hong Kong's read from memory."""
    sessions = around(exchange, day)
    assert str(sessions.days[-1]) == day
    assert local(sessions.closes[-1:], sessions.zone) == [clock]
