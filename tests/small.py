"""A small invented study in csv files, for tests that need their own tables."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pandas_market_calendars as calendars

STUDY = """
title = "Small"
question = "Does it matter?"

[inputs]
deals = "deals.csv"
prices = "prices.csv"
benchmarks = "benchmarks.csv"
timestamp_zone = "Europe/London"

[event_time]
estimation = [-150, -21]
minimum_observations = 100
headline = [-1, 1]
windows = [[0, 1]]

[regression]
treatment = "shares"
controls = ["size"]
columns = ["ols"]

[instruments]
for = "shares"
use = ["spare"]
rationale = "Spare shares were left over before the deal was conceived."

[report]
formats = ["tex"]
"""


# For tests that are not about these, which take most of the small study's second.
LIGHT = """
[placebo]
draws = 0

[scrutiny]
run = false
"""


def write_small_study(folder: Path, deals: int = 40, seed: int = 7) -> Path:
    """Write tables and study file into ``folder``; gives the study file's path."""
    folder.mkdir(parents=True, exist_ok=True)
    stream = np.random.default_rng(seed)
    days = calendars.get_calendar("LSE").schedule("2018-01-02", "2019-12-31").index
    market = stream.normal(0.0003, 0.008, len(days))
    codes = [f"S{at:02d}" for at in range(deals)]
    moves = market[:, None] + stream.normal(0, 0.01, (len(days), deals))
    close = 100 * np.cumprod(1 + moves, axis=0)
    prices = pd.DataFrame(close, index=days.strftime("%Y-%m-%d"), columns=codes)
    prices = prices.rename_axis("date").reset_index().melt("date", None, "security", "close")
    prices["volume"] = 1000
    prices.to_csv(folder / "prices.csv", index=False)
    pd.DataFrame(
        {
            "exchange": "XLON",
            "date": days.strftime("%Y-%m-%d"),
            "close": 1000 * np.cumprod(1 + market),
        }
    ).to_csv(folder / "benchmarks.csv", index=False)
    when = days[stream.integers(200, len(days) - 30, deals)]
    spare = stream.integers(0, 2, deals)
    pd.DataFrame(
        {
            "deal_id": [f"D{at:02d}" for at in range(deals)],
            "security": codes,
            "exchange": "XLON",
            "announced_at": [f"{day:%Y-%m-%d} 10:00" for day in when],
            "shares": np.where(stream.random(deals) < 0.8, spare, 1 - spare),
            "spare": spare,
            "size": stream.normal(0, 1, deals).round(3),
        }
    ).to_csv(folder / "deals.csv", index=False)
    study = folder / "study.toml"
    study.write_text(STUDY)
    return study
