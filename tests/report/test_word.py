"""The memo, opened again: its numbers, its tables, its pages, and what a word processor needs."""

from __future__ import annotations

import io
import zipfile
from dataclasses import replace

import docx
import pytest
from docx.enum.section import WD_ORIENT

from pipeline.core.results import Results
from pipeline.report.docx import file, render
from pipeline.report.memo import memo
from pipeline.report.numerals import lines
from tests.report.runs import with_frames

W = "{http://schemas.openxmlformats.org/wordprocessingml/2006/main}"
# Order of the children of a table's properties: ECMA-376 part 1, CT_TblPr, from memory.
TABLE_PROPERTIES = (
    "tblStyle", "tblpPr", "tblOverlap", "bidiVisual", "tblStyleRowBandSize",
    "tblStyleColBandSize", "tblW", "jc", "tblCellSpacing", "tblInd", "tblBorders", "shd",
    "tblLayout", "tblCellMar", "tblLook",
)  # fmt: skip


@pytest.fixture(scope="module")
def word(files: dict[str, bytes]) -> docx.document.Document:
    return docx.Document(io.BytesIO(files["memo.docx"]))


def test_the_prose_comes_back(full: Results, word: docx.document.Document) -> None:
    shown = "\n".join(p.text for p in word.paragraphs)
    for paragraph in memo(full).paragraphs:
        assert paragraph.text in shown


def test_every_table_is_a_real_table_with_its_numbers(
    full: Results, word: docx.document.Document
) -> None:
    expected = memo(full).tables
    assert len(word.tables) == len(expected)
    for found, table in zip(word.tables, expected, strict=True):
        heads = [cell.text for cell in found.rows[0].cells]
        assert heads == [column.heading for column in table.columns]
        for row, cells in zip(found.rows[1:], table.page_rows, strict=True):
            assert [c.text for c in row.cells] == ["\n".join(lines(cell)) for cell in cells]


def test_the_wide_table_lies_on_its_side(word: docx.document.Document) -> None:
    ways = [section.orientation for section in word.sections]
    assert ways == [WD_ORIENT.PORTRAIT, WD_ORIENT.LANDSCAPE]
    wide = word.sections[1]
    assert wide.page_width > wide.page_height
    room = wide.page_width - wide.left_margin - wide.right_margin
    table = next(t for t in word.tables if len(t.columns) > 4)
    assert sum(column.width for column in table.columns) <= room


def test_headings_repeat_and_rows_stay_whole(word: docx.document.Document) -> None:
    for table in word.tables:
        assert table.rows[0]._tr.trPr.find(f"{W}tblHeader") is not None
        assert all(row._tr.trPr.find(f"{W}cantSplit") is not None for row in table.rows)


def test_parts_stand_in_the_order_the_format_wants(word: docx.document.Document) -> None:
    for table in word.tables:
        names = [child.tag.removeprefix(W) for child in table._tbl.tblPr]
        assert names == sorted(names, key=TABLE_PROPERTIES.index)


def test_headings_are_headings(full: Results, word: docx.document.Document) -> None:
    styled = [p.text for p in word.paragraphs if p.style.name.startswith("Heading")]
    assert styled == [section.heading for section in memo(full).sections]


def test_the_picture_is_there_and_described(full: Results, word: docx.document.Document) -> None:
    assert len(word.inline_shapes) == len(memo(full).figures) == 1
    assert word.inline_shapes[0]._inline.docPr.get("descr") == memo(full).figures[0].alt


def test_nothing_tells_the_time_or_the_writer(files: dict[str, bytes]) -> None:
    word = docx.Document(io.BytesIO(files["memo.docx"]))
    assert word.core_properties.created.year == word.core_properties.modified.year == 2000
    assert word.core_properties.author == ""
    with zipfile.ZipFile(io.BytesIO(files["memo.docx"])) as package:
        assert {info.date_time for info in package.infolist()} == {(1980, 1, 1, 0, 0, 0)}
        assert package.namelist()[0] == "[Content_Types].xml"


def test_words_no_xml_can_hold_are_cleaned(full: Results) -> None:
    study = replace(full.study, title="a\x00b\x0b <w:p/> & c", question="q\ud800\x01 ok")
    word = docx.Document(io.BytesIO(file(memo(with_frames(replace(full, study=study))))))
    text = [p.text for p in word.paragraphs]
    assert "ab <w:p/> & c" in text
    assert "q ok" in text


def test_a_memo_of_one_deal(bare: Results) -> None:
    word = docx.Document(io.BytesIO(render(bare)["memo.docx"]))
    assert [s.orientation for s in word.sections] == [WD_ORIENT.PORTRAIT]
    assert "the one deal" in "\n".join(p.text for p in word.paragraphs)
