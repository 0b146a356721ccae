"""A study over real prices: the documents show the proof, and the numbers are statsmodels'."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm

from tests.end_to_end.conftest import dealwake
from tests.real_prices import write_real_study


@pytest.fixture(scope="module")
def real(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The folder of the raw tables, with the run in ``run``."""
    folder = tmp_path_factory.mktemp("real")
    study = write_real_study(folder)
    dealwake("run", study, "--out", folder / "run")
    return folder


def test_cars_are_those_of_least_squares_on_the_raw_table(real: Path) -> None:
    wide = pd.read_csv(real / "prices.csv").pivot_table("close", "date", "security")
    returns = wide.sort_index().pct_change(fill_method=None)
    index = pd.read_csv(real / "benchmarks.csv").set_index("date")["close"].sort_index()
    market = index.pct_change(fill_method=None)
    deals = pd.read_csv(real / "deals.csv").set_index("deal_id")
    kept = pd.read_parquet(real / "run" / "data" / "deals.parquet").set_index("deal")
    assert len(kept) > 140
    # After the close counts for the next session; every drawn date is a session.
    stamps = deals["announced_at"].str.split(" ", expand=True)
    zero = returns.index.get_indexer(stamps[0]) + (stamps[1] > "16:00").to_numpy()
    deals["zero"] = zero
    for deal, row in deals.loc[kept.index].iloc[:25].iterrows():
        at, y, x = row["zero"], returns[row["security"]], market
        others = deals.loc[(deals["security"] == row["security"]) & (deals["zero"] != at), "zero"]
        window = slice(at - 250, at - 30)
        clean = y.copy()
        for other in others:  # sessions around the company's other deals are left out
            clean.iloc[max(other - 5, 0) : other + 6] = np.nan
        fit = sm.OLS(clean.iloc[window], sm.add_constant(x.iloc[window]), missing="drop").fit()
        event = slice(at - 1, at + 2)
        expected = fit.params.iloc[0] + fit.params.iloc[1] * x.iloc[event]
        car = float((y.iloc[event] - expected).sum())
        assert kept.loc[deal, "car_m1_1"] == pytest.approx(car, abs=1e-10)


def test_where_nothing_was_announced_the_valid_tests_hold_their_level(real: Path) -> None:
    """100 samples of drawn dates: within three Monte-Carlo errors of 5%."""
    placebo = pd.read_parquet(real / "run" / "data" / "placebo.parquet").set_index("test")
    for test in ("dependence_adjusted", "cross_sectional", "standardised"):
        assert abs(placebo.loc[test, "rate"] - 0.05) < 3 * np.sqrt(0.05 * 0.95 / 100)


def test_the_report_shows_day_zero_tests_placebo_and_power(real: Path) -> None:
    page = (real / "run" / "report.html").read_text()
    for words in ("Day zero", "placebo", "power", "does not hold", "after the close"):
        assert words.lower() in page.lower(), words
