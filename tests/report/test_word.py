"""The memo, opened again: its numbers, its tables, its pages, and what a word processor needs."""

from __future__ import annotations

import io
import zipfile
from dataclasses import replace

import docx
import pytest
from docx.enum.section import WD_ORIENT
from lxml import etree

from pipeline.core.results import Results
from pipeline.report.document import Document, Paragraph, Reference, Section
from pipeline.report.docx import file, render
from pipeline.report.house import styled
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


def xml_of(data: bytes, name: str = "word/document.xml") -> etree._Element:
    with zipfile.ZipFile(io.BytesIO(data)) as package:
        return etree.fromstring(package.read(name))


def fields(tree: etree._Element) -> list[tuple[str, str]]:
    """(code, what it shows) of every field, which must be whole: begin, code, separate, end."""
    found, state, code, shown = [], "", "", ""
    for run in tree.iter(f"{W}r"):
        for part in run:
            if part.tag == f"{W}fldChar":
                kind = part.get(f"{W}fldCharType")
                assert (state, kind) in {("", "begin"), ("begin", "separate"), ("separate", "end")}
                if kind == "end":
                    found.append((code.strip(), shown))
                    state, code, shown = "", "", ""
                else:
                    state = kind or ""
            elif part.tag == f"{W}instrText":
                code += part.text or ""
            elif state == "separate":
                shown += part.text or ""
    assert state == ""
    return found


def test_captions_are_numbered_by_fields(full: Results, files: dict[str, bytes]) -> None:
    numbers = memo(full).numbers
    found = [(code, shown) for code, shown in fields(xml_of(files["memo.docx"])) if "SEQ" in code]
    assert sorted(found) == sorted(
        (f"SEQ {kind} \\* ARABIC", at)
        for kind, at in (called.split() for called in numbers.values())
    )
    captions = [p.text for p in docx.Document(io.BytesIO(files["memo.docx"])).paragraphs
                if p.style is not None and p.style.name == "Caption"]  # fmt: skip
    for called in numbers.values():
        assert sum(text.startswith(f"{called}. ") for text in captions) == 1


def test_references_are_fields_that_arrive(full: Results, files: dict[str, bytes]) -> None:
    tree = xml_of(files["memo.docx"])
    marks = {node.get(f"{W}name"): node.get(f"{W}id") for node in tree.iter(f"{W}bookmarkStart")}
    ends = [node.get(f"{W}id") for node in tree.iter(f"{W}bookmarkEnd")]
    assert sorted(marks.values()) == sorted(ends)
    assert len(set(ends)) == len(ends)
    found = [(code.split()[1], shown) for code, shown in fields(tree) if code.startswith("REF")]
    numbers = memo(full).numbers
    assert [shown for _, shown in found] == [
        piece.text for p in memo(full).paragraphs for piece in p.pieces
        if isinstance(piece, Reference)
    ]  # fmt: skip
    assert len(found) >= 3
    assert {name for name, _ in found} <= set(marks)
    assert {shown for _, shown in found} <= set(numbers.values())


def test_the_foot_counts_pages_by_fields(files: dict[str, bytes]) -> None:
    with zipfile.ZipFile(io.BytesIO(files["memo.docx"])) as package:
        names = [name for name in package.namelist() if name.startswith("word/footer")]
    found = [field for name in names for field in fields(xml_of(files["memo.docx"], name))]
    assert [code for code, _ in found] == ["PAGE", "NUMPAGES"]


def test_tables_share_a_style(word: docx.document.Document) -> None:
    style = word.styles["Three Rules"]
    assert {table.style.name for table in word.tables} == {style.name}
    rules = style.element.find(f"{W}tblPr").find(f"{W}tblBorders")
    assert [rule.tag for rule in rules] == [f"{W}top", f"{W}bottom"]
    heading = style.element.find(f"{W}tblStylePr")
    assert heading.get(f"{W}type") == "firstRow"
    assert heading.find(f"{W}rPr").find(f"{W}b") is not None


def test_the_appendix_begins_a_page(word: docx.document.Document) -> None:
    starts = [p.text for p in word.paragraphs if p.paragraph_format.page_break_before]
    assert starts == ["Appendix"]


def test_a_reference_to_nothing_is_refused() -> None:
    section = Section("S", (Paragraph((Reference("nowhere"),)),))
    with pytest.raises(KeyError, match="nowhere"):
        styled(Document("t", "s", (section,), numbered=True))
