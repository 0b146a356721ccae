"""The section on day zero: counts, each deal's sentence, and the headline under other choices."""

from __future__ import annotations

import io
from dataclasses import replace

import numpy as np
import openpyxl
import pandas as pd
import pytest

from pipeline.core.results import Results
from pipeline.report.content import report
from pipeline.report.document import Interval, Number, Statistic, Table, Text
from pipeline.report.html import render as render_html
from pipeline.report.material import Material
from pipeline.report.timing import SHOWN, timing_section
from pipeline.report.xlsx import render as render_workbook
from tests.report.runs import full_run

KINDS = ("after the close", "date only", "before the open", "on a day closed out of turn")


@pytest.fixture(scope="module")
def run() -> Results:
    """The full run with a day zero for each deal and two other readings of the events."""
    made = full_run()
    n = len(made.deals)
    kind = [KINDS[0] if at < n - 6 else KINDS[1 + at % 3] for at in range(n)]
    days = pd.bdate_range("2019-01-01", periods=n).astype("datetime64[s]")
    deals = made.deals.assign(
        exchange="XLON",
        timing=kind,
        day_zero=days,
        day_zero_close="16:30",
        announced_local=[f"{day:%Y-%m-%d} 07:10" for day in days],
        day_zero_reason=[f"Public on day {at}" for at in range(n)],
    )
    readings = pd.DataFrame(
        {
            "reading": ["as in the headline", "day zero at the rumour", "on the second listing"],
            "changed": [0, 7, 1],
            "n": [n, n, 1],
            "mean": [-0.012, -0.02, 0.004],
            "ci_low": [-0.02, -0.03, -0.01],
            "ci_high": [-0.004, -0.01, 0.02],
            "test": "Some t",
            "statistic": [-3.1, -4.2, np.nan],
            "p_value": [0.002, 0.00001, np.nan],
            "reason": ["", "", "one deal only"],
        }
    )
    return replace(made, deals=deals, readings=readings, tables={**made.tables, "deals": deals})


def tables(run: Results) -> dict[str, Table]:
    section = timing_section(Material.of(run))
    assert section is not None
    return {block.name: block for block in section.blocks if isinstance(block, Table)}


def test_counts_add_up_and_known_times_come_first(run: Results) -> None:
    table = tables(run)["day_zero_kinds"]
    kinds = [cell.text for cell, *_ in table.rows if isinstance(cell, Text)]
    assert kinds[:2] == ["Before the open", "After the close"]
    counts = [row[1].value for row in table.rows if isinstance(row[1], Number)]
    assert sum(counts) == len(run.deals)
    assert all(isinstance(row[2], Text) and ": Public on day" in row[2].text for row in table.rows)


def test_a_page_shows_a_few_deals_and_the_workbook_all(run: Results) -> None:
    table = tables(run)["day_zero"]
    assert len(table.page_rows) == SHOWN
    book = openpyxl.load_workbook(io.BytesIO(render_workbook(run)["tables.xlsx"]))
    sheet = book["day_zero"]
    cells = [row[0].value for row in sheet.iter_rows()]
    assert set(run.deals["deal"]) <= set(cells)
    assert len(table.rows) == len(run.deals)


def test_other_readings_stand_beside_the_headline(run: Results) -> None:
    table = tables(run)["readings"]
    assert [row[0].text for row in table.rows if isinstance(row[0], Text)] == [
        "As in the headline", "Day zero at the rumour", "On the second listing",
    ]  # fmt: skip
    mean = table.rows[1][3]
    assert isinstance(mean, Interval)
    assert mean.estimate is not None
    assert mean.estimate.value == pytest.approx(-200)
    assert isinstance(table.rows[0][4], Statistic)
    assert table.rows[2][4] is None
    assert table.rows[2][5] == Text("one deal only")


def test_the_section_is_in_the_report_and_its_page(run: Results) -> None:
    headings = [section.heading for section in report(run).sections]
    assert headings.index("Day zero") == headings.index("From the deal list to the sample") + 1
    page = next(iter(render_html(run).values())).decode()
    assert "Day zero of each deal, and why" in page


def test_without_readings_or_without_a_day_zero(run: Results) -> None:
    assert "readings" not in tables(replace(run, readings=pd.DataFrame()))
    assert timing_section(Material.of(full_run())) is None


def test_a_table_of_very_many_deals_stops_and_says_so(monkeypatch: pytest.MonkeyPatch) -> None:
    """Excel's sheets end at 1,048,576 rows; what a document leaves out stands in data."""
    from pipeline.report import material, timing

    for room in (timing, material):
        monkeypatch.setattr(room, "MOST_ROWS", 2)
    deals = pd.DataFrame(
        {
            "deal": ["D1", "D2", "D3"],
            "exchange": "XLON",
            "announced_local": "09:00",
            "timing": "before the open",
            "day_zero": pd.Timestamp("2020-01-02"),
            "day_zero_close": "16:30",
            "day_zero_reason": "It was before the open",
        }
    )
    table = timing.day_zero_table(deals, {})
    assert [row[0].text for row in table.rows] == ["D1", "D2"]  # type: ignore[union-attr]
    assert "The first 2 of 3 rows" in table.notes[0].text
    assert timing.day_zero_table(deals.head(2), {}).notes == ()
