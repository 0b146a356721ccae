"""The workbook of rows to look at: every row named, its own cells as they stand, no formula."""

from __future__ import annotations

from pathlib import Path

import openpyxl
import pandas as pd
import pytest

from pipeline.report.offending import FIRST_SHEET, HEADS, MUST
from tests.end_to_end.test_draft import invoke
from tests.small import write_small_study

FORMULAS = ["=2+3", "+cmd", "-1+1", "@SUM(A1)"]


@pytest.fixture
def study(tmp_path: Path) -> Path:
    path = write_small_study(tmp_path / "mine")
    deals = pd.read_csv(path.parent / "deals.csv", dtype=str)
    deals.loc[3, "announced_at"] = "=2+3"
    deals.loc[5, "size"] = "n.a.?"
    deals.loc[8, "exchange"] = ""
    deals["Remark"] = [FORMULAS[at % 4] for at in range(len(deals))]
    deals.rename(columns={"size": "Size of Deal"}).to_csv(path.parent / "deals.csv", index=False)
    own = '[inputs.columns.deals]\nsize = "Size of Deal"\n[event_time]'
    path.write_text(path.read_text().replace("[event_time]", own, 1))
    return path


def test_each_row_stands_as_in_the_file_and_its_cell_is_marked(study: Path, tmp_path: Path) -> None:
    place = tmp_path / "offending.xlsx"
    code, text = invoke("check", study, "--rows", place)
    assert code == 2
    assert str(place) in text.replace("\n", "")
    book = openpyxl.load_workbook(place)
    assert book.sheetnames == [FIRST_SHEET, "deals.csv"]
    head, *lines = book["deals.csv"].iter_rows()
    names = [cell.value for cell in head]
    assert tuple(names[: len(HEADS)]) == HEADS
    written = pd.read_csv(study.parent / "deals.csv", dtype=str, keep_default_na=False)
    assert names[len(HEADS) :] == list(written.columns)
    assert [line[0].value for line in lines] == [5, 7, 10]
    about = {5: "announced_at", 7: "Size of Deal", 10: "exchange"}
    for line in lines:
        row = line[0].value
        assert line[1].value == MUST
        own = dict(zip(names[len(HEADS) :], line[len(HEADS) :], strict=True))
        file_row = written.iloc[row - 2]
        assert {name: cell.value or "" for name, cell in own.items()} == file_row.to_dict()
        # Marked by border, bold letters and a note, and nothing else is.
        marked = {name for name, cell in own.items() if cell.comment is not None}
        assert marked == {about[row]}
        assert {name for name, cell in own.items() if cell.border.left.style == "thick"} == marked
        assert all(cell.font.bold for name, cell in own.items() if name in marked)
    assert all(
        cell.data_type != "f" for sheet in book for line in sheet.iter_rows() for cell in line
    )


def test_a_check_that_passes_sends_what_was_dropped_for_want_of_something(
    tmp_path: Path,
) -> None:
    study = write_small_study(tmp_path / "mine")
    deals = pd.read_csv(study.parent / "deals.csv", dtype=str)
    deals.loc[4, "announced_at"] = deals.loc[4, "announced_at"][:10]  # a date without a time
    deals.loc[6, "size"] = ""
    deals.to_csv(study.parent / "deals.csv", index=False)
    place = tmp_path / "rows.xlsx"
    assert invoke("check", study, "--rows", place)[0] == 0
    lines = list(openpyxl.load_workbook(place)["deals.csv"].iter_rows(min_row=2, values_only=True))
    told = {line[0]: line[2] for line in lines}
    assert told[6] == "Announcement with a date and no time"
    assert "D06" in next(line for line in lines if line[0] == 8)
    assert MUST not in {line[1] for line in lines}


def test_nothing_but_an_earlier_list_is_written_over(study: Path, tmp_path: Path) -> None:
    mine = tmp_path / "mine.xlsx"
    mine.write_bytes(b"years of work")
    code, text = invoke("check", study, "--rows", mine)
    assert code == 2
    assert "[output_folder]" in text
    assert mine.read_bytes() == b"years of work"
    assert invoke("check", study, "--rows", tmp_path / "rows.txt")[0] == 2
    place = tmp_path / "rows.xlsx"
    invoke("check", study, "--rows", place)
    first = place.read_bytes()
    invoke("check", study, "--rows", place)
    assert place.read_bytes() == first


def test_restricted_companies_are_sent_to_nobody(tmp_path: Path) -> None:
    study = write_small_study(tmp_path / "mine")
    (study.parent / "restricted.csv").write_text("security\nS03\n")
    text = study.read_text().replace("[inputs]\n", '[inputs]\nrestricted = "restricted.csv"\n')
    study.write_text(text)
    place = tmp_path / "rows.xlsx"
    assert invoke("check", study, "--rows", place)[0] == 3
    book = openpyxl.load_workbook(place)
    assert book.sheetnames == [FIRST_SHEET]
    cells = [str(cell.value) for line in book[FIRST_SHEET].iter_rows() for cell in line]
    assert not any("restricted" in cell.lower() or "S03" in cell for cell in cells)


def test_a_file_written_with_other_capitals_is_named(tmp_path: Path) -> None:
    study = write_small_study(tmp_path / "mine")
    (study.parent / "deals.csv").rename(study.parent / "Deals.csv")
    code, text = invoke("check", study)
    assert code == 2
    assert "there is 'Deals.csv'" in " ".join(text.split())
