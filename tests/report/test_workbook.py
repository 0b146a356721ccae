"""The workbook, read again by another library: the same numbers, no formula, one sheet a table."""

from __future__ import annotations

import io
import zipfile
from dataclasses import replace
from datetime import datetime, time

import openpyxl
import pytest
from openpyxl.worksheet.worksheet import Worksheet

from pipeline.core.estimate import Estimate
from pipeline.core.results import Results
from pipeline.report.content import report
from pipeline.report.document import Column, Day, Number, Paragraph, Table, Text
from pipeline.report.xlsx import part_titles, parts, render, sheet_names
from tests.report.runs import estimate, with_columns, with_frames


@pytest.fixture(scope="module")
def book(files: dict[str, bytes]) -> openpyxl.Workbook:
    return openpyxl.load_workbook(io.BytesIO(files["tables.xlsx"]))


def data_tables(run: Results) -> list[Table]:
    return [table for table in report(run).tables if not table.form]


def written(sheet: Worksheet, table: Table) -> list[list[object]]:
    """What the rows of ``table`` hold in the sheet, one list a row."""
    titles = [part_titles([row[at] for row in table.rows]) for at in range(len(table.columns))]
    first = 5 if any(len(t) > 1 for t in titles) else 4
    width = sum(len(t) for t in titles)
    rows = sheet.iter_rows(first, first + len(table.rows) - 1, 1, width, values_only=True)
    return [list(row) for row in rows] if table.rows else []


def expected(table: Table) -> list[list[object]]:
    titles = [part_titles([row[at] for row in table.rows]) for at in range(len(table.columns))]
    found = []
    for row in table.rows:
        line: list[object] = []
        for cell, names in zip(row, titles, strict=True):
            held = [
                p.value
                if isinstance(p, Number)
                else datetime.combine(p.day, time())
                if isinstance(p, Day)
                else p
                for p in parts(cell)
            ]
            line += (held + [None] * len(names))[: len(names)]
        found.append(line)
    return found


def test_one_sheet_a_table_and_a_list_of_them(full: Results, book: openpyxl.Workbook) -> None:
    tables = data_tables(full)
    assert book.sheetnames == ["Contents", *sheet_names(tables)]
    listed = [row[0] for row in book["Contents"].iter_rows(4, values_only=True)]
    assert listed == book.sheetnames[1:]


def test_every_value_comes_back(full: Results, book: openpyxl.Workbook) -> None:
    for table, name in zip(data_tables(full), book.sheetnames[1:], strict=True):
        for got, want in zip(written(book[name], table), expected(table), strict=True):
            assert len(got) == len(want)
            for a, b in zip(got, want, strict=True):
                if isinstance(b, float):
                    assert a == pytest.approx(b, rel=1e-14, abs=1e-300)
                else:
                    assert a == b


def test_numbers_keep_full_precision_under_a_format(full: Results, book: openpyxl.Workbook) -> None:
    lead = full.columns[3]
    assert isinstance(lead, Estimate)
    sheet = book["comparison"]
    row = next(r for r in sheet.iter_rows() if r[0].value == "Relative size")
    cells = [c for c in row if isinstance(c.value, float)]
    assert cells[0].value == pytest.approx(-0.00034 * 1e4, rel=1e-14)
    assert cells[0].number_format == "#,##0.0"


def test_units_stand_in_the_headings(full: Results, book: openpyxl.Workbook) -> None:
    for table, name in zip(data_tables(full), book.sheetnames[1:], strict=True):
        heads = [c for c in next(book[name].iter_rows(3, 3, values_only=True)) if c]
        assert heads == [column.heading for column in table.columns if column.heading]


@pytest.mark.parametrize("start", ["=", "+", "-", "@", "\t=", "https://"])
def test_words_never_become_formulas(full: Results, start: str) -> None:
    evil = f'{start}HYPERLINK("x","y")'
    study = replace(full.study, title=evil, labels={"paid_in_shares": evil}, currency=evil)
    diagnostics = full.diagnostics.assign(meaning=evil, threshold=evil)
    run = with_frames(replace(full, study=study, diagnostics=diagnostics))
    data = render(with_columns(run, estimate(evil, -0.01)))["tables.xlsx"]
    book = openpyxl.load_workbook(io.BytesIO(data))
    cells = [c for sheet in book for row in sheet.iter_rows() for c in row if c.value is not None]
    assert {c.data_type for c in cells} <= {"s", "n", "d"}
    assert any(c.value == evil for c in cells)
    assert not [c for c in cells if c.hyperlink]


def test_odd_sets_are_words_beside_the_number(full: Results, book: openpyxl.Workbook) -> None:
    row = next(
        r for r in book["comparison"].iter_rows(values_only=True) if r[0] == "Paid in shares"
    )
    words = next(v for v in row if isinstance(v, str) and v.startswith("two rays"))
    assert row[row.index(words) - 1] == pytest.approx(-89)


def test_sheet_names_are_allowed_and_different() -> None:
    def table(name: str) -> Table:
        return Table(name, Paragraph(("t",)), (Column("c"),), ((Text("x"),),))

    names = sheet_names([table(n) for n in ("a" * 40, "a" * 40, "b[1]:*?/\\", "Contents", "'")])
    assert len({n.lower() for n in (*names, "Contents")}) == 6
    assert all(0 < len(n) <= 31 and not set("[]:*?/\\'") & set(n) for n in names)


def test_empty_tables_and_one_deal(bare_files: dict[str, bytes], bare: Results) -> None:
    book = openpyxl.load_workbook(io.BytesIO(bare_files["tables.xlsx"]))
    assert len(book.sheetnames) == len(data_tables(bare)) + 1


def test_the_package_tells_no_time(files: dict[str, bytes]) -> None:
    with zipfile.ZipFile(io.BytesIO(files["tables.xlsx"])) as package:
        assert len({info.date_time for info in package.infolist()}) == 1
        assert b"2000-01-01" in package.read("docProps/core.xml")
