"""Announcements with a date and no time, and the headline window they meet."""

from __future__ import annotations

from pathlib import Path

import pytest

from tests.returns.markets import DAY, Market, market, said

DATED = ["D0", "D3"]


def dated(day: str, headline: str) -> Market:
    """A market in which two deals have a date alone."""
    made = market()
    alone = made.deals["deal_id"].isin(DATED)
    made.deals["announced_at"] = made.deals["announced_at"].where(~alone, day)
    made.study = made.study.replace("headline = [-1, 1]", f"headline = {headline}")
    return made


@pytest.mark.parametrize("headline", ["[0, 0]", "[-1, 0]"])
def test_a_window_that_ends_on_day_zero_needs_times(headline: str, tmp_path: Path) -> None:
    found = said(tmp_path, dated(DAY, headline))
    assert found.rules() == {"time_needed": "error"}
    text = found.text("time_needed")
    assert "2 deals with a date and no time (D0, D3)" in text
    assert f"event_time.headline to [{headline[1:-4]}, 1]" in text
    assert found.findings[0].where.startswith("deals.parquet")


@pytest.mark.parametrize("headline", ["[0, 1]", "[-1, 1]", "[-5, -1]"])
def test_a_window_that_holds_the_next_session_does_not(headline: str, tmp_path: Path) -> None:
    found = said(tmp_path, dated(DAY, headline))
    assert found.measured is not None
    assert "time_needed" not in found.rules()
    assert {deal for deal, rule, _ in found.ledger if rule == "time_unknown"} == set(DATED)


def test_nor_does_a_day_without_trading(tmp_path: Path) -> None:
    """The session after a Sunday is day zero and holds the news of that day."""
    found = said(tmp_path, dated("2018-09-16", "[0, 0]"))
    assert found.measured is not None
    assert "time_needed" not in found.rules()
