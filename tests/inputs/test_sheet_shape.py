"""Merged cells, hidden rows and further sheets: what a sheet hides from whoever reads its cells."""

from __future__ import annotations

from pathlib import Path

import openpyxl
import pytest

from pipeline.core.findings import Severity
from pipeline.inputs.contracts import Column
from pipeline.inputs.files import Source, read_table
from pipeline.inputs.sheet_shape import sheet_findings
from pipeline.inputs.typed import typed


def book(folder: Path) -> tuple[Path, openpyxl.Workbook]:
    made = openpyxl.Workbook()
    sheet = made.active
    assert sheet is not None
    sheet.title = "Deals"
    for row in (["deal_id", "company"], ["D1", "A"], ["D2", "A"], ["D3", "B"]):
        sheet.append(row)
    return folder / "deals.xlsx", made


def found(path: Path, made: openpyxl.Workbook, **how: object) -> list[tuple[str, str, str]]:
    made.save(path)
    source = Source("deals", path, **how)  # type: ignore[arg-type]
    return [(item.rule, item.severity, item.row) for item in sheet_findings(source)]


def test_a_plain_sheet_says_nothing(tmp_path: Path) -> None:
    assert found(*book(tmp_path)) == []


def test_merged_cells_stop_the_reading(tmp_path: Path) -> None:
    path, made = book(tmp_path)
    made["Deals"].merge_cells("B2:B3")
    assert found(path, made) == [("merged_cells", Severity.ERROR, "2")]
    source = Source("deals", path)
    _, findings = typed(read_table(source), source, [Column("deal_id", "text")], "")
    assert [item.rule for item in findings] == ["merged_cells"]
    assert "B2:B3" in findings[0].got


def test_a_merged_title_above_the_headings_is_none_of_the_table(tmp_path: Path) -> None:
    path, made = book(tmp_path)
    made["Deals"].insert_rows(1)
    made["Deals"]["A1"] = "Deals of the year"
    made["Deals"].merge_cells("A1:B1")
    assert found(path, made, header_row=2) == []
    assert found(path, made) == [("merged_cells", Severity.ERROR, "1")]


def test_hidden_rows_are_named(tmp_path: Path) -> None:
    path, made = book(tmp_path)
    made["Deals"].row_dimensions[3].hidden = True
    assert found(path, made) == [("hidden_rows", Severity.ERROR, "3")]


@pytest.mark.parametrize(
    ("filled", "sheet", "rules"),
    [(True, "", ["several_sheets"]), (True, "Deals", []), (False, "", [])],
)
def test_further_sheets(tmp_path: Path, filled: bool, sheet: str, rules: list[str]) -> None:
    path, made = book(tmp_path)
    other = made.create_sheet("Old")
    if filled:
        other["A1"] = "deal_id"
    assert [rule for rule, _, _ in found(path, made, sheet=sheet)] == rules
