"""The reading on second listings: which estimation sessions another deal of the company takes."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

from pipeline.returns.sessions import sessions_between
from tests.returns.markets import EVENT, SESSIONS, Market, market, said

EARLIER = 60
AROUND = 5


def listed_twice() -> Market:
    """The first company trades in New York too, over a longer history, and has an earlier deal."""
    made = market()
    days = pd.Index(sessions_between("XNYS", "2017-06-01", "2018-12-31").days.astype(str))
    stream = np.random.default_rng(2)
    common = stream.normal(0, 0.008, len(days))
    closes = 100 * np.cumprod(1 + common + stream.normal(0, 0.01, len(days)))
    second = pd.DataFrame({"security": "S0N", "date": days, "close": closes, "volume": 900.0})
    level = pd.DataFrame({"exchange": "XNYS", "date": days, "close": np.cumprod(1 + common)})
    made.raw["prices"] = pd.concat([made.prices, second], ignore_index=True)
    made.raw["benchmarks"] = pd.concat([made.benchmarks, level], ignore_index=True)
    day = SESSIONS[EVENT - EARLIER]
    row = made.deals.iloc[[0]].assign(deal_id="EARLY", announced_at=f"{day}T10:00:00+01:00")
    made.deals = pd.concat([made.deals, row], ignore_index=True)
    lines = {"line": ["S0", "S0N"], "exchange": ["XLON", "XNYS"], "primary": [1, 0]}
    made.add("listings", pd.DataFrame({"security": "S0", "currency": ["GBP", "USD"], **lines}))
    made.key("event_time", "second_lines = true")
    return made


def test_sessions_around_another_deal_are_masked_on_the_second_exchange(tmp_path: Path) -> None:
    found = said(tmp_path, listed_twice())
    assert found.measured is not None
    (reading,) = (r for r in found.measured.readings if r.dimension == "listing")
    row = reading.abnormal.deals.index("D0")
    unused = ~np.isfinite(reading.abnormal.estimation_returns[row])
    days = reading.abnormal.estimation_days[row][unused]
    sessions = sessions_between("XNYS", "2017-06-01", "2018-12-31").days
    at = int(np.searchsorted(sessions, SESSIONS[EVENT - EARLIER]))
    np.testing.assert_array_equal(days, sessions[at - AROUND : at + AROUND + 1])
