"""Closes, benchmarks and money in one currency, by hand and through a study."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from pipeline.returns.currency import Rates, rates_of
from tests.returns.markets import DEALS, EVENT, SESSIONS, Market, Spoil, market, said

EURO = 1.1 * np.exp(np.cumsum(np.random.default_rng(3).normal(0, 0.004, len(SESSIONS))))


def rates() -> pd.DataFrame:
    """What a pound and a dollar cost in euro."""
    pound = pd.DataFrame({"date": SESSIONS.astype(str), "currency": "GBP", "rate": EURO})
    return pd.concat([pound, pound.assign(currency="USD", rate=1 / (1.3 * EURO))])


def in_euro(made: Market) -> None:
    """Half of the companies in pence, the index in pounds, two deals' money in each currency."""
    made.add("rates", rates())
    made.key("currency", 'common = "EUR"')
    made.key("series.benchmarks", 'currency = "GBP"')
    closes = made.closes.copy()
    made.closes.iloc[:, :3] *= 100
    table = made.prices
    codes = list(closes.columns[:3])
    made.raw["prices"] = table.assign(currency=np.where(table["security"].isin(codes), "GBX", ""))
    made.key("series.prices", 'currency = "GBP"')
    made.closes = closes
    made.deals["market_value"] = 100.0
    made.deals["currency"] = ["GBP", "GBP", "USD", "EUR", "EUR", "GBX"]


def test_a_rate_is_what_one_unit_costs() -> None:
    table = pd.DataFrame(
        {
            "date": pd.to_datetime(["2021-03-02", "2021-03-01", "2021-03-05"]),
            "currency": "GBP",
            "rate": [1.2, 1.1, 1.3],
        }
    )
    made = rates_of("eur", table)
    days = np.array(["2021-02-28", "2021-03-01", "2021-03-03", "2021-03-05"], "datetime64[D]")
    np.testing.assert_allclose(made.on(days, "GBP"), [np.nan, 1.1, np.nan, 1.3])
    np.testing.assert_allclose(made.on(days, "GBP", back=1), [np.nan, 1.1, 1.2, 1.3])
    np.testing.assert_allclose(made.on(days, "GBX"), [np.nan, 0.011, np.nan, 0.013])
    np.testing.assert_allclose(made.on(days, "GBp"), made.on(days, "GBX"))
    np.testing.assert_allclose(made.on(days, "EUR"), 1.0)
    assert np.isnan(made.on(days, "JPY")).all()
    assert Rates("GBP").on(days[:1], "GBX").tolist() == [0.01]
    assert made.knows("GBX")
    assert not made.knows("JPY")


def test_prices_benchmark_and_money_by_hand(tmp_path: Path) -> None:
    made = market()
    in_euro(made)
    told = said(tmp_path, made)
    assert told.measured is not None, told.findings
    panel = told.measured.panels["XLON"]
    np.testing.assert_allclose(panel.close, made.closes.to_numpy() * EURO[:, None], rtol=1e-12)
    euro = made.level.to_numpy() * EURO
    np.testing.assert_allclose(panel.benchmark[1:], euro[1:] / euro[:-1] - 1, atol=1e-14)
    before = EVENT - 2  # one session before the window [-1, +1]
    wanted = 100 * np.array(
        [EURO[before], EURO[before], 1 / (1.3 * EURO[before]), 1, 1, EURO[before] / 100]
    )
    np.testing.assert_allclose(told.measured.deals["market_value"], wanted, rtol=1e-12)
    assert set(told.measured.deals["currency"]) == {"EUR"}
    converted = [deal for deal, rule, _ in told.ledger if rule == "converted"]
    assert converted == ["D0", "D1", "D2", "D5"]


def test_returns_are_converted_as_closes_are(tmp_path: Path) -> None:
    made = market()
    made.add("rates", rates())
    made.key("currency", 'common = "EUR"')
    for name in ("prices", "benchmarks"):
        made.key(f"series.{name}", 'currency = "GBP"')
    moves = made.returns()
    made.raw["prices"] = moves
    made.key("series.prices", 'given = "returns"')
    told = said(tmp_path, made)
    assert told.measured is not None, told.findings
    euro = made.closes.to_numpy() * EURO[:, None]
    found = told.measured.panels["XLON"].returns[1:]
    np.testing.assert_allclose(found, euro[1:] / euro[:-1] - 1, atol=1e-12)


def without_a_rate(session: int) -> Spoil:
    def spoil(made: Market) -> None:
        in_euro(made)
        table = made.more["rates"]
        made.more["rates"] = table[table["date"] != str(SESSIONS[session])]

    return spoil


def without_currency(made: Market) -> None:
    in_euro(made)
    made.more["rates"] = made.more["rates"][made.more["rates"]["currency"] == "GBP"]


def turned_over(rows: slice, currency: str = "GBP") -> Spoil:
    def spoil(made: Market) -> None:
        in_euro(made)
        table = made.more["rates"].reset_index(drop=True)
        some = table.index[table["currency"] == currency][rows]
        table.loc[some, "rate"] = 1 / table.loc[some, "rate"]
        made.more["rates"] = table

    return spoil


def yen_upside_down(made: Market) -> None:
    in_euro(made)
    yen = pd.DataFrame({"date": SESSIONS.astype(str), "currency": "JPY", "rate": 130.0})
    made.more["rates"] = pd.concat([made.more["rates"], yen])


def no_currency_of_prices(made: Market) -> None:
    in_euro(made)
    made.study = made.study.replace('[series.prices]\ncurrency = "GBP"', "")


def two_currencies(made: Market) -> None:
    in_euro(made)
    table = made.raw["prices"].copy()
    table.iloc[3, table.columns.get_loc("currency")] = "USD"
    made.raw["prices"] = table


def no_study_currency(made: Market) -> None:
    made.deals["market_value"] = 100.0
    made.deals["currency"] = ["GBP"] * (DEALS - 1) + ["USD"]


def empty_currency(made: Market) -> None:
    in_euro(made)
    made.deals.loc[2, "currency"] = ""


CASES: dict[str, tuple[Spoil, str, str, str]] = {
    "no rate on one session": (without_a_rate(100), "missing_rate", "warning", "GBX"),
    "no rate of a currency of money": (without_currency, "missing_rate", "error", "USD"),
    "money without a currency": (empty_currency, "missing_rate", "error", "empty currency"),
    "ten rates turned over": (turned_over(slice(0, 10), "USD"), "inverse_rate", "error", "USD"),
    "yen for a euro": (yen_upside_down, "inverse_rate", "error", "130"),
    "prices of no currency": (no_currency_of_prices, "currency_unclear", "error", "S3"),
    "a security in two currencies": (two_currencies, "currency_unclear", "error", "S0"),
    "money of two currencies without rates": (
        no_study_currency,
        "mixed_currencies",
        "error",
        "GBP, USD",
    ),
}


@pytest.mark.parametrize("case", CASES)
def test_what_is_wrong_with_currencies(case: str, tmp_path: Path) -> None:
    spoil, rule, severity, words = CASES[case]
    made = market()
    spoil(made)
    told = said(tmp_path, made)
    assert told.rules().get(rule) == severity, told.rules()
    assert words in told.text(rule)
    if severity == "warning":
        assert told.measured is not None
        panel = told.measured.panels["XLON"]
        assert np.isnan(panel.returns[100:102]).all()
        assert np.isnan(panel.benchmark[100:102]).all()
