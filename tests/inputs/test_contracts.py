"""What each kind of cell may hold. Words for missing and for yes and no, spreadsheet serials,
error cells: common practice, no source. Dates: ISO 8601."""

from __future__ import annotations

from datetime import date, datetime, time
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from pipeline.core.findings import Finding, Severity
from pipeline.inputs.contracts import Column, apply_contract, read_dates, row_numbers
from pipeline.inputs.files import ROW, Source

SOURCE = Source("deals", Path("deals.xlsx"), {"size": "Size (m)"})
DAY = pd.Timestamp("2021-03-01")


def read(cells: object, column: Column, date_format: str = "") -> tuple[pd.Series, list[Finding]]:
    """Cells of one column, typed, rows numbered from 2."""
    values = cells if isinstance(cells, pd.Series) else pd.Series(cells, dtype=object)
    table = pd.DataFrame({column.name: values})
    table[ROW] = range(2, len(table) + 2)
    typed, findings = apply_contract(table, SOURCE, [column], date_format)
    return typed[column.name], findings


def one(findings: list[Finding]) -> Finding:
    (finding,) = findings
    assert finding.severity is Severity.ERROR
    assert finding.file == "deals.xlsx"
    return finding


@pytest.mark.parametrize(
    ("cell", "value"),
    [
        ("1.5", 1.5), (" 12 ", 12.0), ("1e3", 1000.0), ("-4", -4.0), (7, 7.0), (2.5, 2.5),
        (True, 1.0), ("TRUE", 1.0), ("no", 0.0), ("Yes", 1.0), (False, 0.0),
    ],
)  # fmt: skip
def test_numbers(cell: object, value: float) -> None:
    values, findings = read([cell], Column("size", "number"))
    assert findings == []
    assert values.tolist() == [value]
    assert values.dtype == np.float64


@pytest.mark.parametrize("cell", ["", "N/A", "#N/A", "na", "-", ".", "NULL", "None", None, np.nan])
def test_words_for_missing(cell: object) -> None:
    for kind, empty in (("number", np.nan), ("text", ""), ("date", pd.NaT)):
        values, findings = read([cell, cell], Column("size", kind))
        assert findings == []
        assert values.isna().all() or (values == empty).all()
    _, findings = read(["1", cell, cell], Column("size", "number", filled=True))
    finding = one(findings)
    assert (finding.rule, finding.row, finding.column) == ("missing_value", "3, 4", "Size (m)")
    assert finding.got == "2 empty cells"


def test_a_code_that_is_a_word_for_none_is_shown() -> None:
    """NA is a share's code on more than one exchange: common practice, no source."""
    _, findings = read(["AB", "NA ", ""], Column("size", "text", filled=True))
    finding = one(findings)
    assert (finding.rule, finding.row) == ("missing_value", "3, 4")
    assert finding.got == "2 cells empty or 'NA', a word for none"
    assert "code of yours" in finding.remedy


def test_percent_signs_are_named() -> None:
    _, findings = read(["61.3 %", "70%"], Column("size", "number"))
    assert one(findings).remedy == "Take the signs away in the whole column: 61.3 for '61.3 %'."


def test_a_declared_format_is_worded_with_the_files_own_marks() -> None:
    _, findings = read(["13.01.2005", "14.01.2005"], Column("day", "date"), "%d/%m/%Y")
    assert "'%d.%m.%Y'" in one(findings).remedy


@pytest.mark.parametrize(
    "cell",
    ["1,5", "1,234.5", "1.234,5", "1 234", "5%", "€5", "(5)", "1.2bn", "12abc", "0x10", "1_000",
     "inf", "-Infinity", "about 5", datetime(2021, 3, 1), date(2021, 3, 1), time(1, 2)],
)  # fmt: skip
def test_numbers_that_would_be_a_guess(cell: object) -> None:
    _, findings = read(["1", cell], Column("size", "number"))
    finding = one(findings)
    assert (finding.rule, finding.row, finding.column) == ("unparseable_number", "3", "Size (m)")
    assert finding.got == f"'{cell}'"


def test_dates_stored_in_a_column_of_numbers() -> None:
    """They would pass as nanoseconds since 1970."""
    _, findings = read(pd.Series([DAY, pd.NaT]), Column("size", "number"))
    assert (one(findings).rule, one(findings).row) == ("unparseable_number", "2")


def test_integers_and_flags_stored_as_such() -> None:
    for stored in (pd.Series([1, 0]), pd.Series([True, False]), pd.Series([1.0, 0.0])):
        values, findings = read(stored, Column("size", "number"))
        assert findings == []
        assert values.tolist() == [1.0, 0.0]


@pytest.mark.parametrize(
    ("cell", "text"),
    [("  A B ", "A B"), (7, "7"), (7.0, "7"), (7.5, "7.5"), ("007", "007"), ("N/A", "")],
)
def test_text(cell: object, text: str) -> None:
    values, findings = read([cell], Column("size", "text"))
    assert findings == []
    assert values.tolist() == [text]


@pytest.mark.parametrize("error", ["#DIV/0!", "#REF!", "#NAME?", "#VALUE!", "#NUM!"])
@pytest.mark.parametrize("kind", ["text", "number", "date", "stamp"])
def test_formulas_that_failed(error: str, kind: str) -> None:
    values, findings = read(["", error, error], Column("size", kind))
    finding = one(findings)
    assert (finding.rule, finding.row, finding.column) == ("error_cell", "3, 4", "Size (m)")
    assert finding.got == f"'{error}'"
    assert error not in values.astype(str).tolist()


@pytest.mark.parametrize("date_format", ["", "%d/%m/%Y", "%d/%m/%Y %H:%M%z"])
@pytest.mark.parametrize(
    "cell",
    [
        "2021-03-01",
        "2021-03-01 16:30",
        "2021-03-01T16:30:00.5Z",
        "2021-03-01T00:00:00+09:00",
        date(2021, 3, 1),
        datetime(2021, 3, 1),
        datetime(2021, 3, 1, 16),
        pd.Timestamp("2021-03-01"),
    ],
)
def test_dates(cell: object, date_format: str) -> None:
    """The date as written, whatever format was declared for others."""
    values, findings = read([cell, None], Column("day", "date"), date_format)
    assert findings == []
    assert values.iloc[0] == DAY
    assert pd.isna(values.iloc[1])
    assert values.dtype == "datetime64[s]"


def test_a_declared_format() -> None:
    values, findings = read(["01/03/2021", "2021-03-01"], Column("day", "date"), "%d/%m/%Y")
    assert findings == []
    assert values.tolist() == [DAY, DAY]


@pytest.mark.parametrize(
    "cell", ["2021-3-1", "2021-02-30", "20210301", "2021-03-0112", "2021-03-01 soon", "soon", 7]
)
def test_dates_that_are_none(cell: object) -> None:
    _, findings = read(["2021-03-01", cell], Column("day", "date"))
    finding = one(findings)
    assert (finding.rule, finding.row, finding.column) == ("unparseable_date", "3", "day")
    assert str(cell) in finding.got


@pytest.mark.parametrize(
    "cell", ["01/03/2021", "45231", 45231, 45231.0, "1 March 2021", "21-03-01", "2021/03/01"]
)
def test_dates_that_would_be_a_guess(cell: object) -> None:
    """Two readings of 01/03, two origins of a serial day, another format: none is decided here."""
    _, findings = read(["2021-03-01", cell], Column("day", "date"))
    finding = one(findings)
    assert (finding.rule, finding.row, finding.column) == ("mixed_date_formats", "3", "day")
    assert f"'{cell}'" in finding.got


@pytest.mark.parametrize("cell", ["1900-01-01", "1949-12-31", "1970-01-01", "2100-01-02"])
def test_fill_values_of_a_data_base(cell: str) -> None:
    _, findings = read([cell, "2021-03-01"], Column("day", "date"))
    finding = one(findings)
    assert (finding.rule, finding.row, finding.column) == ("date_out_of_range", "2", "day")
    assert cell in finding.got


def test_midnight_of_another_zone_is_no_date() -> None:
    """Midnight in Tokyo is the day before in UTC, and the zone is not stored."""
    midnight = pd.Series(pd.to_datetime(["2021-03-01", None]))
    utc = read_dates(midnight.dt.tz_localize("UTC"))
    assert not utc[1].any()
    assert utc[0].iloc[0] == DAY
    tokyo = midnight.dt.tz_localize("Asia/Tokyo").dt.tz_convert("UTC")
    values, bad = read_dates(tokyo)
    assert bad.tolist() == [True, False]
    assert values.isna().all()
    naive = read_dates(pd.Series(pd.to_datetime(["2021-03-01 16:30"])))
    assert naive[0].tolist() == [DAY]


def test_columns_that_are_not_there() -> None:
    table = pd.DataFrame({"deal_id": ["D1"], ROW: [2]})
    contract = [
        Column("deal_id", "text"),
        Column("size", "number", why="named in the study"),
        Column("day", "date", optional=True),
        Column("zone", "text", optional=True),
        Column("when", "stamp", optional=True),
        Column("volume", "number", optional=True),
    ]
    typed, findings = apply_contract(table, SOURCE, contract)
    finding = one(findings)
    assert (finding.rule, finding.column) == ("missing_column", "Size (m)")
    assert "the file has deal_id" in finding.got
    assert "named in the study" in finding.expected
    assert "[inputs.columns.deals] size" in finding.remedy
    assert list(typed.columns) == ["deal_id", "size", "day", "zone", "when", "volume", ROW]
    assert typed[["size", "day", "volume"]].isna().all(axis=None)
    assert typed["zone"].tolist() == [""]
    assert typed["day"].dtype == "datetime64[s]"


def test_many_bad_rows_are_counted_not_listed() -> None:
    _, findings = read(["x"] * 8, Column("size", "number"))
    finding = one(findings)
    assert finding.row == "2, 3, 4, 5, 6 and 3 more"
    assert finding.got == ", ".join(["'x'"] * 5)
    assert finding.rows == tuple(range(2, 10))
    assert row_numbers(pd.Series([3.0])) == (3,)
