"""Files as people save them: csv of several dialects, parquet, xlsx; refusals that say why.

Spreadsheet conventions: common practice, no source.
"""

from __future__ import annotations

from datetime import date, datetime
from pathlib import Path

import openpyxl
import pandas as pd
import pytest

from pipeline.core.findings import Finding, InputProblem
from pipeline.inputs.files import ROW, Source, read_table
from pipeline.inputs.source import only

TEXT = "deal_id,security\nD1,A\nD2,B\n"


def csv(folder: Path, content: str | bytes) -> Source:
    path = folder / "deals.csv"
    path.write_bytes(content.encode() if isinstance(content, str) else content)
    return Source("deals", path)


def xlsx(path: Path, *sheets: list[list[object]]) -> Path:
    book = openpyxl.Workbook()
    book.remove(book.active)
    for at, rows in enumerate(sheets):
        sheet = book.create_sheet(f"Sheet {at + 1}")
        for row in rows:
            sheet.append(row)
    book.save(path)
    return path


def refusal(source: Source) -> Finding:
    with pytest.raises(InputProblem) as caught:
        read_table(source)
    (finding,) = caught.value.findings
    return finding


@pytest.mark.parametrize(
    "content",
    [
        TEXT,
        "\ufeff" + TEXT,
        TEXT.replace(",", ";"),
        TEXT.replace(",", "\t"),
        TEXT.replace("\n", "\r\n"),
        TEXT.rstrip("\n"),
        'deal_id,security\n"D1","A"\n"D2","B"\n',
        "Deal ID, Security \nD1,A\nD2,B\n",
    ],
    ids=["plain", "bom", "semicolons", "tabs", "crlf", "no last newline", "quotes", "headers"],
)
def test_dialects_of_csv(content: str, tmp_path: Path) -> None:
    table = read_table(csv(tmp_path, content))
    assert list(table.columns) == ["deal_id", "security", ROW]
    assert table["deal_id"].tolist() == ["D1", "D2"]
    assert table["security"].tolist() == ["A", "B"]
    assert table[ROW].tolist() == [2, 3]


def test_cells_of_csv_stay_as_written(tmp_path: Path) -> None:
    """No guess at types: identifiers keep their zeros, decimal commas stay to be refused."""
    table = read_table(csv(tmp_path, 'deal_id;value;name\n007;1,5;"A; B"\n1E5;;NA\n'))
    assert table["deal_id"].tolist() == ["007", "1E5"]
    assert table["value"].iloc[0] == "1,5"
    assert pd.isna(table["value"].iloc[1])
    assert table["name"].tolist() == ["A; B", "NA"]


def test_declared_columns_and_the_same_but_for_case(tmp_path: Path) -> None:
    source = csv(tmp_path, "Ref,Security,Announced\nD1,A,x\n")
    named = Source("deals", source.path, {"deal_id": "Ref", "announced_at": "Announced"})
    assert list(read_table(named).columns) == ["deal_id", "security", "announced_at", ROW]


def test_only_some_columns_and_rows(tmp_path: Path) -> None:
    source = csv(tmp_path, "Code,date,x\nA,1,7\nB,2,8\nA,3,9\nC,4,10\n")
    named = Source("prices", source.path, {"security": "Code"})
    table = read_table(named, ["security", "date", "volume"], only(["A", "C"]))
    assert table["security"].tolist() == ["A", "A", "C"]
    assert list(table.columns) == ["security", "date", ROW]
    assert table[ROW].tolist() == [2, 4, 5]


def test_parquet_keeps_its_types(tmp_path: Path) -> None:
    path = tmp_path / "prices.parquet"
    pd.DataFrame(
        {"security": [1, 2, 3], "date": pd.to_datetime(["2021-03-01"] * 3), "close": [1.5, 2, 3]}
    ).to_parquet(path)
    table = read_table(Source("prices", path), None, only(["1", "3"]))
    assert table["close"].tolist() == [1.5, 3.0]
    assert table[ROW].tolist() == [2, 4]
    assert pd.api.types.is_datetime64_any_dtype(table["date"])


def test_xlsx_rows_are_numbered_as_the_sheet_shows_them(tmp_path: Path) -> None:
    rows = [
        ["deal_id", "when", "day"],
        ["D1", datetime(2021, 3, 1, 8), date(2021, 3, 1)],
        [None, None, None],
        ["D2", "soon", None],
    ]
    table = read_table(Source("deals", xlsx(tmp_path / "deals.xlsx", rows)))
    assert table[ROW].tolist() == [2, 4]
    assert table["when"].tolist() == [datetime(2021, 3, 1, 8), "soon"]
    assert table["day"].iloc[1] == ""


def test_a_sheet_by_name_and_the_first_without_one(tmp_path: Path) -> None:
    path = xlsx(tmp_path / "deals.xlsx", [["a"], [1]], [["b"], [2]])
    assert list(read_table(Source("deals", path)).columns) == ["a", ROW]
    assert list(read_table(Source("deals", path, {}, "Sheet 2")).columns) == ["b", ROW]
    missing = refusal(Source("deals", path, {}, "Deals"))
    assert (missing.rule, missing.file) == ("unreadable_file", "deals.xlsx, sheet Deals")
    assert "Sheet 1, Sheet 2" in missing.got


def test_error_cells_of_a_sheet_are_not_lost(tmp_path: Path) -> None:
    """A failed formula must not pass for an empty cell; #N/A is a word for missing."""
    path = tmp_path / "deals.xlsx"
    xlsx(path, [["deal_id", "size"], ["D1", "#DIV/0!"], ["D2", 2], ["D3", "#N/A"]])
    book = openpyxl.load_workbook(path)
    for cell in ("B2", "B4"):
        book["Sheet 1"][cell].data_type = "e"
    book.save(path)
    table = read_table(Source("deals", path))
    assert table["size"].tolist() == ["#DIV/0!", 2, "#N/A"]


@pytest.mark.parametrize("header", ["deal_id,deal_id", "deal_id,Deal ID", "DEAL_ID , deal_id"])
def test_two_columns_of_one_name(header: str, tmp_path: Path) -> None:
    finding = refusal(csv(tmp_path, f"{header}\nD1,D2\n"))
    assert (finding.rule, finding.file, finding.column) == (
        "ambiguous_column", "deals.csv", "deal_id",
    )  # fmt: skip


def test_two_columns_of_one_name_in_a_sheet(tmp_path: Path) -> None:
    path = xlsx(tmp_path / "deals.xlsx", [["size", "deal_id", "size"], [1, "D1", 2]])
    assert refusal(Source("deals", path)).rule == "ambiguous_column"


def test_a_declared_column_wins_over_one_of_our_name(tmp_path: Path) -> None:
    source = csv(tmp_path, "deal_id,Ref\nold,new\n")
    table = read_table(Source("deals", source.path, {"deal_id": "Ref"}))
    assert list(table.columns) == ["deal_id", ROW]
    assert table["deal_id"].tolist() == ["new"]


@pytest.mark.parametrize("content", [b"", b"deal_id,security\n"], ids=["empty", "header only"])
def test_files_without_rows(content: bytes, tmp_path: Path) -> None:
    finding = refusal(csv(tmp_path, content))
    assert (finding.rule, finding.file) == ("empty_table", "deals.csv")


def test_a_file_in_another_encoding(tmp_path: Path) -> None:
    finding = refusal(csv(tmp_path, "deal_id,name\nD1,Jam\nD2,Caf\xe9\n".encode("cp1252")))
    assert (finding.rule, finding.file, finding.row) == ("unreadable_file", "deals.csv", "3")
    assert "UTF-8" in finding.expected
    assert "inputs.source.deals.encoding" in finding.remedy


@pytest.mark.parametrize("at", [0, 20, 40])
@pytest.mark.parametrize(("odd", "cells"), [("D,A,1,9", "4 cells"), ("D,A", "2 cells")])
def test_a_row_of_another_length_is_named_and_never_lost(
    odd: str, cells: str, at: int, tmp_path: Path
) -> None:
    rows = [f"D{number},A,1" for number in range(40)]
    rows.insert(at, odd)
    finding = refusal(csv(tmp_path, "\n".join(["deal_id,security,x", *rows]) + "\n"))
    assert (finding.rule, finding.row, finding.got) == ("unreadable_file", str(at + 2), cells)
    assert finding.expected == "3 cells, as the header has"


@pytest.mark.parametrize("name", ["deals.parquet", "deals.xlsx"])
def test_a_file_that_is_not_what_its_name_says(name: str, tmp_path: Path) -> None:
    path = tmp_path / name
    path.write_text("deal_id,security\nD1,A\n")
    finding = refusal(Source("deals", path))
    assert (finding.rule, finding.file) == ("unreadable_file", name)


def test_a_kind_of_file_nobody_reads(tmp_path: Path) -> None:
    path = tmp_path / "deals.ods"
    path.write_text("x")
    finding = refusal(Source("deals", path))
    assert (finding.rule, finding.file) == ("unreadable_file", "deals.ods")
    assert ".csv, .parquet, .xlsx" in finding.expected


def test_a_file_that_is_not_there(tmp_path: Path) -> None:
    finding = refusal(Source("prices", tmp_path / "none.csv"))
    assert (finding.rule, finding.file, finding.column) == (
        "missing_file", "none.csv", "inputs.prices",
    )  # fmt: skip
    assert str(tmp_path / "none.csv") in finding.got
