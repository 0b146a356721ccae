"""Gaps, delistings and currencies on their way from the study file to the report."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from tests.end_to_end.conftest import dealwake
from tests.small import write_small_study

CODE = "S00"


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A run with trade-to-trade returns, a delisting without a return, and pounds made euro."""
    base = tmp_path_factory.mktemp("policies")
    study = write_small_study(base)
    prices = pd.read_csv(base / "prices.csv")
    deals = pd.read_csv(base / "deals.csv")
    days = np.sort(prices["date"].unique())
    zero = int(np.searchsorted(days, deals["announced_at"].iloc[0][:10]))
    own = prices["security"] == CODE
    thin = own & prices["date"].isin(days[zero - 60 : zero - 50 : 2])
    ended = own & (prices["date"] > days[zero + 4])
    prices[~(thin | ended)].to_csv(base / "prices.csv", index=False)
    deals.assign(market_value=100.0, currency="GBP").to_csv(base / "deals.csv", index=False)
    gone = {"security": CODE, "date": days[zero + 5], "return": -0.2, "reason": "performance"}
    pd.DataFrame([gone]).to_csv(base / "delistings.csv", index=False)
    rate = 1.15 + 0.0001 * np.arange(len(days))
    table = pd.DataFrame({"date": days, "currency": "GBP", "rate": rate})
    table.to_csv(base / "rates.csv", index=False)
    text = study.read_text().replace('formats = ["tex"]', 'formats = ["html"]')
    text = text.replace(
        "[inputs]", '[inputs]\ndelistings = "delistings.csv"\nrates = "rates.csv"', 1
    ).replace("[event_time]", '[event_time]\nmissing = "trade_to_trade"', 1)
    text += '\n[currency]\ncommon = "EUR"\n[series.prices]\ncurrency = "GBP"\n'
    text += '[series.benchmarks]\ncurrency = "GBP"\n[placebo]\ndraws = 20\n'
    study.write_text(text)
    dealwake("run", study, "--out", base / "out", "--quiet")
    return base / "out"


def test_the_ledger_counts_what_each_policy_did(folder: Path) -> None:
    ledger = pd.read_parquet(folder / "data" / "ledger.parquet")
    counts = ledger["rule"].value_counts()
    assert counts["converted"] == 40
    assert counts["longer_returns"] == 1
    assert counts["delisting_return"] == 1
    value = ledger.loc[ledger["rule"] == "delisting_return", "value"].item()
    assert value == "-20.0% on day +5, supplied"


def test_the_deals_are_in_the_common_currency(folder: Path) -> None:
    deals = pd.read_parquet(folder / "data" / "deals.parquet")
    assert deals["market_value"].between(115, 120.1).all()
    assert set(deals["currency"]) == {"EUR"}


def test_the_report_names_the_policies(folder: Path) -> None:
    text = (folder / "report.html").read_text()
    for words in (
        "(trade to trade)",
        "belongs to the session after the last price",
        "one session before the headline window",
        "Delisting return added",
        "Returns over several sessions",
    ):
        assert words in text
