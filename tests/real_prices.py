"""A study over real daily prices, twenty large shares 1990 to 2022 as the package skfolio carries
them: real tables no one here wrote, with invented announcements on drawn dates.

Because nothing was announced on those dates, no test should find a reaction more often than its
level says.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pandas as pd

STUDY = """
title = "Drawn dates on real prices"
question = "Do dates on which nothing was announced show a reaction?"

[inputs]
deals = "deals.csv"
prices = "prices.csv"
benchmarks = "benchmarks.csv"
timestamp_zone = "America/New_York"

[event_time]
headline = [-1, 1]
windows = [[0, 0], [-5, 5]]

[expected_returns]
headline = "market_model"
also = ["constant_mean", "market_adjusted"]

[placebo]
draws = 100

[characteristics.run_up]
price = "run_up"
window = [-28, -8]

[regression]
treatment = "in_shares"
controls = ["run_up"]
clusters = ["security"]
columns = ["ols"]
"""


def write_real_study(folder: Path, deals: int = 150, seed: int = 11) -> Path:
    """Write raw tables and study file into ``folder``; gives the study file's path."""
    from skfolio.datasets import load_sp500_dataset, load_sp500_index

    folder.mkdir(parents=True, exist_ok=True)
    wide = load_sp500_dataset()
    index = load_sp500_index().iloc[:, 0]
    long = wide.rename_axis("date").reset_index().melt("date", None, "security", "close")
    long.dropna().to_csv(folder / "prices.csv", index=False, date_format="%Y-%m-%d")
    pd.DataFrame(
        {"exchange": "XNYS", "date": index.index.strftime("%Y-%m-%d"), "close": index.to_numpy()}
    ).to_csv(folder / "benchmarks.csv", index=False)
    stream = np.random.default_rng(seed)
    days = wide.index[300:-30]
    drawn = days[stream.choice(len(days), deals, replace=False)]
    hours = stream.choice(["08:05", "11:40", "17:15"], deals)
    pd.DataFrame(
        {
            "deal_id": [f"D{at:03d}" for at in range(deals)],
            "security": stream.choice(wide.columns, deals),
            "exchange": "XNYS",
            "announced_at": [
                f"{day:%Y-%m-%d} {hour}" for day, hour in zip(drawn, hours, strict=True)
            ],
            "in_shares": stream.integers(0, 2, deals),
        }
    ).to_csv(folder / "deals.csv", index=False)
    study = folder / "real_prices.toml"
    study.write_text(STUDY)
    return study


if __name__ == "__main__":
    print(write_real_study(Path(sys.argv[1])))
