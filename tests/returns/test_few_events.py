"""Warnings about few deals and few dates; limits are common practice, no source."""

from __future__ import annotations

import pandas as pd
import pytest

from pipeline.core.findings import Severity
from pipeline.returns.few import few_events


def rules(dates: list[str]) -> list[str]:
    found = few_events(pd.DataFrame({"day_zero": pd.to_datetime(dates)}), "deals.csv")
    assert {finding.severity for finding in found} <= {Severity.WARNING}
    return [finding.rule for finding in found]


@pytest.mark.parametrize(
    ("dates", "wanted"),
    [
        ([f"2021-03-{day:02d}" for day in range(1, 11)], []),
        ([f"2021-03-{day:02d}" for day in range(1, 10)], ["few_events"]),
        (["2021-03-01"] * 20, ["few_dates"]),
        (["2021-03-01", "2021-03-02"] * 10, ["few_dates"]),
        (["2021-03-01", "2021-03-02", "2021-03-03"] * 10, []),
        (["2021-03-01"] * 3, ["few_events", "few_dates"]),
        (["2021-03-01"], ["few_events"]),
        (["2021-03-01", "2021-03-02"], ["few_events"]),
    ],
)
def test_few_deals_and_few_dates(dates: list[str], wanted: list[str]) -> None:
    assert rules(dates) == wanted
