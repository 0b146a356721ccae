"""Peers, calendar time and matched companies, from study key to page."""

from __future__ import annotations

from pathlib import Path

import pandas as pd
import pytest

from pipeline.flow import run
from pipeline.study.load import load_study
from tests.end_to_end.conftest import dealwake
from tests.small import STUDY, write_small_study

ASKED = """
[calendar_time]
horizons = [40]
weightings = ["equal", "value"]
fewest_holdings = 2

[matched_control]
windows = [[1, 20]]
within = ["industry"]
nearest = ["assets"]
"""
MODELS = """
[expected_returns]
headline = "market_model"
also = ["peer_adjusted"]
peers = "industry"
"""
FILES = 'benchmarks = "benchmarks.csv"\ncandidates = "candidates.csv"\n'


def write_tables(folder: Path, more: str) -> Path:
    """The small study with industries, market values and companies that announced nothing."""
    study = write_small_study(folder)
    deals = pd.read_csv(folder / "deals.csv")
    deals["industry"] = ["jam", "tin"] * (len(deals) // 2)
    deals["market_value"] = 100.0 + deals.index
    deals["counterparty"] = [*deals["security"].iloc[2:], "", ""]
    deals.to_csv(folder / "deals.csv", index=False)
    rows = [
        {
            "security": security,
            "exchange": "XLON",
            "year": year,
            "as_of": f"{year - 1}-12-31",
            "deal_id": deal if announced[:4] == str(year) else "",
            "industry": industry,
            "assets": 50 + at,
        }
        for at, (security, deal, announced, industry) in enumerate(
            deals[["security", "deal_id", "announced_at", "industry"]].itertuples(index=False)
        )
        for year in (2018, 2019)
    ]
    pd.DataFrame(rows).to_csv(folder / "candidates.csv", index=False)
    text = STUDY.replace('benchmarks = "benchmarks.csv"\n', FILES) + more
    study.write_text(text, encoding="utf-8")
    return study


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A finished run with everything asked for."""
    folder = tmp_path_factory.mktemp("longer")
    study = write_tables(folder, ASKED + MODELS)
    study.write_text(study.read_text().replace('formats = ["tex"]', 'formats = ["html", "xlsx"]'))
    dealwake("run", study, "--out", folder / "run", "--quiet")
    return folder / "run"


def test_every_table_is_saved(folder: Path) -> None:
    portfolios = pd.read_parquet(folder / "data" / "calendar_time.parquet")
    assert portfolios["horizon"].tolist() == [40] * 4
    assert set(portfolios["weighting"]) == {"equal", "value"}
    assert portfolios[["alpha", "std_error", "ci_low"]].notna().all(axis=None)
    matched = pd.read_parquet(folder / "data" / "matched.parquet")
    deals = pd.read_parquet(folder / "data" / "deals.parquet")
    assert len(matched) == len(deals)
    held = matched[matched["control"] != ""].merge(deals, on="deal")
    industry = dict(zip(deals["security"], deals["industry"], strict=True))
    first = held["control"].str.split(", ").str[0]
    assert (first.map(industry).fillna(held["industry"]) == held["industry"]).all()
    assert (first != held["security"]).all()
    (mean,) = pd.read_parquet(folder / "data" / "buy_and_hold.parquet").to_dict("records")
    assert mean["n"] == len(held)
    assert mean["mean"] == pytest.approx(held["bhar"].mean())


def test_deals_without_a_control_are_in_the_ledger(folder: Path) -> None:
    ledger = pd.read_parquet(folder / "data" / "ledger.parquet")
    matched = pd.read_parquet(folder / "data" / "matched.parquet")
    noted = set(ledger.loc[ledger["rule"] == "no_control", "deal"])
    assert noted == set(matched.loc[matched["control"] == "", "deal"])


def test_peers_are_a_model_beside_the_first(folder: Path) -> None:
    tests = pd.read_parquet(folder / "data" / "event_tests.parquet")
    means = tests.groupby("expected_return", sort=False)["mean"].first()
    assert list(means.index) == ["market_model", "peer_adjusted"]
    assert means["market_model"] != means["peer_adjusted"]
    several = pd.read_parquet(folder / "data" / "several_windows.parquet")
    assert set(several["expected_return"]) == {"market_model", "peer_adjusted"}


def test_the_page_tells_of_each(folder: Path) -> None:
    page = (folder / "report.html").read_text(encoding="utf-8")
    for words in (
        "Over longer horizons",
        "Portfolios in calendar time",
        "Buy-and-hold returns over matched companies",
        "What several windows cost",
        "peer adjusted",
    ):
        assert words in page, words


def test_too_few_peers_lose_the_deal_under_that_headline(tmp_path: Path) -> None:
    asked = MODELS.replace('headline = "market_model"', 'headline = "peer_adjusted"')
    asked = asked.replace('also = ["peer_adjusted"]', "fewest_peers = 16")
    study = load_study(write_tables(tmp_path, asked))
    results, _ = run(study)
    dropped = [entry for _, entry in results.ledger if entry.rule == "few_peers"]
    assert dropped
    assert {entry.threshold for entry in dropped} == {"16 peers"}
    kept = set(results.abnormal["peer_adjusted"].deals)
    assert not kept & {entry.deal for entry in dropped}


def test_peers_named_one_by_one(tmp_path: Path) -> None:
    """A peer of no deal has its prices read and its exchange taken from its company."""
    asked = MODELS.replace('peers = "industry"', "fewest_peers = 2")
    study = write_tables(tmp_path, asked)
    text = study.read_text().replace(FILES, 'benchmarks = "benchmarks.csv"\npeers = "peers.csv"\n')
    study.write_text(text)
    deals = pd.read_csv(tmp_path / "deals.csv")
    prices = pd.read_csv(tmp_path / "prices.csv")
    other = prices[prices["security"] == "S00"].assign(security="P00")
    other["close"] = other["close"][::-1].to_numpy()
    pd.concat([prices, other]).to_csv(tmp_path / "prices.csv", index=False)
    pairs = [(code, peer) for code in deals["security"] for peer in ("P00", "S38", "S39")]
    pd.DataFrame(pairs, columns=["security", "peer"]).to_csv(tmp_path / "peers.csv", index=False)
    results, _ = run(load_study(study))
    found = results.abnormal["peer_adjusted"]
    assert found.mean_parameters == 3
    assert (found.observations > 0).sum() >= 30
