"""Which listing of a company counts: declared, then turnover, then the home market.

The order of the rule is common practice, no source.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from pipeline.core.findings import InputProblem
from pipeline.core.ledger import Action
from pipeline.core.prices import PricePanel
from pipeline.core.window import Window
from pipeline.returns.listings import choose_lines, line_entries, on_lines, on_second_lines
from tests.returns.panels import panel_of_closes

ESTIMATION = Window(-60, -11)
DAY = pd.Timestamp("2021-04-30")


def panel(exchange: str, code: str, close: float, volume: float) -> PricePanel:
    days = np.arange("2021-01-01", "2021-06-01", dtype="datetime64[D]")
    days = days[np.is_busday(days)]
    flat = panel_of_closes(days, (code,), np.full((len(days), 1), close), np.ones(len(days)))
    return replace(flat, exchange=exchange, volume=np.full((len(days), 1), volume))


PANELS = {"XLON": panel("XLON", "A.L", 10.0, 500.0), "XNYS": panel("XNYS", "A.N", 20.0, 300.0)}
DEALS = pd.DataFrame(
    {
        "deal_id": ["D1", "D2"],
        "security": ["A", "B"],
        "exchange": ["XXXX", "XLON"],
        "announced_date": [DAY, DAY],
    }
)


def table(**changes: list[object]) -> pd.DataFrame:
    made = {
        "security": ["A", "A"],
        "line": ["A.L", "A.N"],
        "exchange": ["XLON", "XNYS"],
        "primary": [np.nan, np.nan],
        "home": [np.nan, np.nan],
        "currency": ["USD", "USD"],
    }
    return pd.DataFrame({**made, **changes})


def chosen(listings: pd.DataFrame) -> tuple[str, str]:
    """The line of company A, and why."""
    choices = choose_lines(DEALS["security"], DEALS["announced_date"], listings, PANELS, ESTIMATION)
    return choices["A"].line.code, choices["A"].why


def test_what_is_declared_comes_first() -> None:
    listings = table(primary=[1.0, np.nan], home=[np.nan, 1.0])
    assert chosen(listings) == ("A.L", "declared as the primary listing")


def test_then_turnover_in_one_currency() -> None:
    """20 x 300 = 6,000 a session against 10 x 500 = 5,000."""
    code, why = chosen(table(home=[1.0, np.nan]))
    assert code == "A.N"
    assert why == "highest median turnover, 6,000 a session against 5,000"


def test_turnover_is_that_of_the_estimation_window() -> None:
    """What was traded around the announcement has no say."""
    volume = PANELS["XLON"].volume.copy()
    volume[-30:] = 1e9
    panels = {**PANELS, "XLON": replace(PANELS["XLON"], volume=volume)}
    choices = choose_lines(DEALS["security"], DEALS["announced_date"], table(), panels, ESTIMATION)
    assert choices["A"].line.code == "A.N"


@pytest.mark.parametrize("currency", [["GBP", "USD"], ["", "USD"], ["", ""]])
def test_then_home_where_turnover_cannot_be_compared(currency: list[object]) -> None:
    assert chosen(table(currency=currency, home=[1.0, np.nan]))[0] == "A.L"
    with pytest.raises(InputProblem) as caught:
        chosen(table(currency=currency))
    (finding,) = caught.value.findings
    assert finding.rule == "undecided_listing"
    assert "A.L on XLON, A.N on XNYS" in finding.got


def test_deals_are_moved_to_their_line_and_told_why() -> None:
    choices = choose_lines(DEALS["security"], DEALS["announced_date"], table(), PANELS, ESTIMATION)
    moved = on_lines(DEALS, choices)
    assert moved["line"].tolist() == ["A.N", "B"]
    assert moved["exchange"].tolist() == ["XNYS", "XLON"]
    assert moved["security"].tolist() == ["A", "B"]
    (entry,) = line_entries(DEALS, choices)
    assert (entry.deal, entry.rule, entry.action) == ("D1", "line_chosen", Action.FLAGGED)
    assert entry.value.startswith("A.N on XNYS: highest median turnover")
    second = on_second_lines(moved, choices)
    assert second[["deal_id", "line", "exchange"]].to_numpy().tolist() == [["D1", "A.L", "XLON"]]


def test_all_dates_of_a_company_are_on_one_line() -> None:
    """The first date decides, so that sessions of its deals can be counted from one another."""
    volume = PANELS["XLON"].volume.copy()
    volume[:30] = 1e6
    panels = {**PANELS, "XLON": replace(PANELS["XLON"], volume=volume)}
    companies = pd.Series(["A", "A"])
    dates = pd.Series([DAY, pd.Timestamp("2021-02-25")])
    choices = choose_lines(companies, dates, table(), panels, Window(-30, -5))
    assert choices["A"].line.code == "A.L"
    assert (
        choose_lines(companies[:1], dates[:1], table(), panels, Window(-30, -5))["A"].line.code
        == "A.N"
    )


def test_a_company_with_one_line_has_no_second_and_no_entry() -> None:
    listings = table().iloc[:1]
    choices = choose_lines(DEALS["security"], DEALS["announced_date"], listings, PANELS, ESTIMATION)
    assert choices["A"].second is None
    assert line_entries(DEALS, choices) == ()
    assert on_second_lines(on_lines(DEALS, choices), choices).empty
