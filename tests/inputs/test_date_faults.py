"""Every way a date or a time goes wrong in a file: what is done, and under which rule.

Which cells are refused is common practice, no source; the two systems of serial days are those
that spreadsheets document (day 1 is 1 January 1900, or day 0 is 1 January 1904; 1900 counts as a
leap year in the first), value from memory and held against openpyxl's own conversion.
"""

from __future__ import annotations

from datetime import datetime, timedelta
from pathlib import Path

import pandas as pd
import pytest
from openpyxl.utils.datetime import CALENDAR_MAC_1904, CALENDAR_WINDOWS_1900, from_excel

from pipeline.core.findings import Finding, InputProblem, Severity
from pipeline.core.rules import RULES
from pipeline.inputs.date_formats import SERIALS, serial_day, shape
from pipeline.inputs.read import Tables, read_inputs
from tests.inputs.tables import WANTED, frames, write_all

ERROR, WARNING = Severity.ERROR, Severity.WARNING
ZONE = "Europe/London"
Outcome = Tables | list[Finding]


def read(folder: Path, cells: list[str], date_format: str = "", zone: str = ZONE) -> Outcome:
    """The tables with these cells as announcements of D1 to D3, or what stops them."""
    tables = frames()
    tables["deals"] = tables["deals"].assign(announced_at=cells, timestamp_zone="")
    tables["candidates"] = tables["candidates"].assign(as_of="1999-12-31")
    if date_format:  # the other tables keep ISO 8601, which is always read
        tables["deals"]["earnings_release"] = ""
    try:
        return read_inputs(write_all(folder, tables), WANTED, zone=zone, date_format=date_format)
    except InputProblem as fault:
        return list(fault.findings)


def finding(outcome: Outcome) -> Finding:
    found = outcome if isinstance(outcome, list) else list(outcome.findings)
    assert len(found) == 1, found
    return found[0]


CASES: dict[str, tuple[list[str], str, Severity, str, tuple[str, ...]]] = {
    "two formats": (
        ["2021-03-01 08:00", "15/03/2021 09:00", "16/03/2021 09:00"],
        "mixed_date_formats", ERROR, "3, 4",
        ("'15/03/2021 09:00', '16/03/2021 09:00' as day/month/year", "'2021-03-01 08:00'"),
    ),
    "three formats": (
        ["2021/03/01", "15/03/2021", "5 March 2021"],
        "mixed_date_formats", ERROR, "2, 3, 4",
        ("as year/month/day", "as day/month/year", "as a month in letters"),
    ),
    "day first and month first": (
        ["15/03/2021", "03/16/2021", "04/05/2021"],
        "mixed_date_formats", ERROR, "2, 3, 4",
        ("as day/month/year", "as month/day/year", "or month/day/year"),
    ),
    "day first throughout": (
        ["15/03/2021", "04/05/2021", "06/05/2021"],
        "unparseable_date", ERROR, "2, 3, 4", ("written as day/month/year",),
    ),
    "either order throughout": (
        ["05/04/2021", "06/04/2021", "12/04/2021"],
        "ambiguous_day_month", ERROR, "2, 3, 4",
        ("day first 100% fall on weekdays", "month first 67% fall", "day first fits better"),
    ),
    "serial days": (
        ["44256", "44257", "44258.75"],
        "serial_date", ERROR, "2, 3, 4",
        ("2021-03-01 under 'excel'", "2025-03-02 under 'excel 1904'", "'excel' fits better"),
    ),
    "serial days of the later count": (
        ["42795", "42796", "42797"],
        "serial_date", ERROR, "2, 3, 4", ("2017-03-01 under 'excel'", "2021-03-02"),
    ),
    "two-digit years": (
        ["15/03/21", "16/03/21", "17/03/21"], "two_digit_year", ERROR, "2, 3, 4", ("'15/03/21'",),
    ),
    "words": (
        ["2021-03-01 08:00", "soon", "2021-06-01"], "unparseable_date", ERROR, "3", ("'soon'",),
    ),
    "a day that is none": (
        ["2021-03-01", "2021-02-30", "2021-06-01"], "unparseable_date", ERROR, "3", ("02-30",),
    ),
    "an hour that is none": (
        ["2021-03-01", "2021-03-02 25:00", "2021-06-01"],
        "unparseable_date", ERROR, "3", ("25:00",),
    ),
    "a skipped hour": (
        ["2021-03-28 01:30", "2021-03-02", "2021-06-01"],
        "impossible_local_time", ERROR, "2", ("01:30", "Europe/London"),
    ),
    "an hour that ran twice": (
        ["2021-10-31 01:30", "2021-03-02", "2021-06-01"],
        "impossible_local_time", ERROR, "2", ("2021-10-31 01:30",),
    ),
    "a date to come": (
        ["2097-05-05 10:00", "2021-03-02", "2021-06-01"],
        "date_out_of_range", ERROR, "2", ("2097",),
    ),
    "the first day of a clock": (
        ["1970-01-01", "2021-03-02", "2021-06-01"], "date_out_of_range", ERROR, "2", ("1970",),
    ),
    "the last day of a calendar": (
        ["9999-12-31", "2021-03-02", "2021-06-01"], "date_out_of_range", ERROR, "2", ("9999",),
    ),
    "the first day of a century": (
        ["1900-01-01", "2021-03-02", "2021-06-01"], "date_out_of_range", ERROR, "2", ("1900",),
    ),
    "day zero of a spreadsheet": (
        ["1900-01-00", "2021-03-02", "2021-06-01"], "unparseable_date", ERROR, "2", ("1900-01-00",),
    ),
    "an empty cell": (
        ["", "2021-03-02", "2021-06-01"], "missing_value", ERROR, "2", (),
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", CASES)
def test_a_fault_of_a_date_is_named(name: str, tmp_path: Path) -> None:
    cells, rule, severity, row, parts = CASES[name]
    found = finding(read(tmp_path, cells))
    assert (found.rule, found.severity, found.row) == (rule, severity, row)
    assert (found.file, found.column) == ("deals.csv", "announced_at")
    assert rule in RULES
    for part in parts:
        assert part in found.got
    assert found.expected
    assert found.remedy.endswith(".")


def test_a_time_without_a_zone_is_not_guessed(tmp_path: Path) -> None:
    found = finding(read(tmp_path, ["2021-03-01 08:00", "2021-03-02", "2021-06-01"], zone=""))
    assert (found.rule, found.row) == ("missing_zone", "2")


def test_no_more_than_three_examples_a_format(tmp_path: Path) -> None:
    tables = frames()
    rows = [f"{day}/03/2021" for day in range(13, 20)]
    tables["prices"] = pd.DataFrame(
        {"security": "A", "date": [*rows, "2021-03-01"], "close": "10", "volume": "1"}
    )
    with pytest.raises(InputProblem) as caught:
        read_inputs(write_all(tmp_path, tables), WANTED, zone=ZONE)
    (found,) = caught.value.findings
    assert (found.rule, found.file) == ("mixed_date_formats", "prices.csv")
    assert "'13/03/2021', '14/03/2021', '15/03/2021' and more as day/month/year" in found.got
    assert found.row == "2, 3, 4, 5, 6 and 2 more"


@pytest.mark.parametrize(
    ("declared", "first"), [("excel", "2021-03-01"), ("excel 1904", "2025-03-02")]
)
def test_declared_serial_days_are_read(declared: str, first: str, tmp_path: Path) -> None:
    read_tables = read(tmp_path, ["44256", "44257.75", "44258"], declared)
    assert isinstance(read_tables, Tables)
    assert f"{read_tables.deals['announced_date'].iloc[0]:%Y-%m-%d}" == first
    assert pd.isna(read_tables.deals["announced_utc"].iloc[0])
    assert read_tables.deals["announced_utc"].iloc[1].hour == 18


def test_serial_days_declared_of_the_wrong_count(tmp_path: Path) -> None:
    """Saturdays and Sundays throughout: the other count gives weekdays."""
    cells = ["44254", "44255", "44261"]
    found = finding(read(tmp_path, cells, "excel"))
    assert (found.rule, found.severity) == ("serial_date", WARNING)
    assert found.got == "0% of the dates on weekdays under 'excel'"
    assert "'excel 1904' would give" in found.expected


@pytest.mark.parametrize("number", [61, 20_000, 44_256, 44_256.5, 59_999.99])
def test_serial_days_are_those_of_spreadsheets(number: float) -> None:
    """Against openpyxl, which reads the workbooks themselves."""
    for declared, epoch in zip(SERIALS, (CALENDAR_WINDOWS_1900, CALENDAR_MAC_1904), strict=True):
        found = serial_day(number, declared)
        there = from_excel(number, epoch)
        assert isinstance(found, datetime)
        assert isinstance(there, datetime)
        assert abs(found - there) < timedelta(seconds=1)
    assert serial_day(number, "%d/%m/%Y") is None
    assert serial_day("soon", "excel") is None


@pytest.mark.parametrize(
    ("cell", "wanted"),
    [
        ("15/03/2021", "day/month/year"),
        ("03-15-2021 10:00", "month/day/year"),
        ("05.04.2021", "day/month/year or month/day/year"),
        ("2021/03/15", "year/month/day"),
        ("15 March 2021", "a month in letters"),
        ("3/4/21", "a year of two digits"),
        (44256, "a spreadsheet's serial day"),
        ("44256.5", "a spreadsheet's serial day"),
        ("2021-13-45", ""),
        ("32/13/2021", ""),
        (7, ""),
        (True, ""),
        ("soon", ""),
    ],
)
def test_the_format_of_a_cell(cell: object, wanted: str) -> None:
    assert shape(cell) == wanted


def test_dates_stored_as_midnights_of_utc_have_no_time(tmp_path: Path) -> None:
    cells = [f"2021-0{month}-01T00:00:00+00:00" for month in (3, 4, 6)]
    read_tables = read(tmp_path, cells)
    assert isinstance(read_tables, Tables)
    assert read_tables.deals["announced_utc"].isna().all()
    assert read_tables.deals["announced_date"].dt.month.tolist() == [3, 4, 6]
