"""A textbook's single-share event study, run through the command as a study of its own.

Source of the numbers: Huntington-Klein, The Effect, ch. 17 (event study of the Google share on
2015-08-10, data in the package causaldata), recomputed with statsmodels; see
tests/reference/events.json, case textbook_reorganisation.
"""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from causaldata import google_stock

from tests.end_to_end.conftest import ROOT, dealwake

STUDY = """
title = "One share"
question = "Did the share move?"

[inputs]
deals = "deals.csv"
prices = "prices.csv"
benchmarks = "benchmarks.csv"

[event_time]
estimation = [-68, -6]
minimum_observations = 60
headline = [0, 0]
windows = [[-2, 10]]

[expected_returns]
headline = "market_model"
also = ["market_adjusted", "constant_mean"]

[tests]
headline = "single_event"
use = ["single_event"]
"""
CASES = json.loads((ROOT / "tests" / "reference" / "events.json").read_text())["cases"]
CASE = CASES["textbook_reorganisation"]
MODELS = {"AR_risk": "market_model", "AR_market": "market_adjusted", "AR_mean": "constant_mean"}


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    base = tmp_path_factory.mktemp("single")
    returns = google_stock.load_pandas().data
    dates = pd.to_datetime(returns["Date"])
    # Levels with these returns: one at 100 on the session before the first.
    first = pd.bdate_range(end=dates.iloc[0] - pd.Timedelta(days=1), periods=1)[0]
    days = [first, *dates]
    for name, column, key in (
        ("prices", "Google_Return", {"security": "S1"}),
        ("benchmarks", "SP500_Return", {"exchange": "XNYS"}),
    ):
        level = 100 * np.cumprod(np.append(1.0, 1 + returns[column].to_numpy()))
        frame = pd.DataFrame({**key, "date": days, "close": level})
        frame.to_csv(base / f"{name}.csv", index=False, float_format="%.17g")
    (base / "deals.csv").write_text(
        "deal_id,security,exchange,announced_at\nD1,S1,XNYS,2015-08-10T12:00:00-04:00\n"
    )
    (base / "study.toml").write_text(STUDY)
    dealwake("run", base / "study.toml", "--out", base / "out", "--quiet")
    return base / "out"


def expected_values() -> dict[str, dict[str, float]]:
    found = {key: item["value"] for key, item in CASE["expected"].items() if key[:3] == "201"}
    assert len(found) == 13
    return found


@pytest.mark.parametrize("name", MODELS)
def test_abnormal_returns_day_by_day(folder: Path, name: str) -> None:
    data = pd.read_parquet(folder / "data" / "abnormal_returns.parquet")
    own = data[data["expected_return"] == MODELS[name]].set_index("date")["abnormal_return"]
    for day, values in expected_values().items():
        assert own[pd.Timestamp(day)] == pytest.approx(values[name], abs=1e-10)


def test_the_single_deal_test_leads(folder: Path) -> None:
    tests = pd.read_parquet(folder / "data" / "event_tests.parquet")
    row = tests[tests["headline"]].iloc[0]
    assert row["n"] == 1
    # t = AR / S(AR) by the textbook's own alpha, beta and sigma (forecast-error variance).
    assert row["mean"] == pytest.approx(expected_values()["2015-08-10"]["AR_risk"], abs=1e-10)
    assert row["df"] == CASE["expected"]["n_est"]["value"] - 2
    assert row["status"] == "ok"


def test_the_documents_speak_of_one_deal(folder: Path) -> None:
    text = (folder / "report.html").read_text()
    assert "one deal" in text.lower() or "single" in text.lower()
