"""The memo as a PDF, read back: words, numbers, bookmarks, tags, fonts, pages and stable bytes."""

from __future__ import annotations

import io
import re
import shutil
import subprocess
from dataclasses import replace
from typing import Any

import pytest
from pypdf import PdfReader
from pypdf.generic import Destination

from pipeline.core.house import House
from pipeline.core.results import Results
from pipeline.report import docx, pdf
from pipeline.report.document import Column, Document, Number, Paragraph, Section, Table, Text
from pipeline.report.fonts import lacking
from pipeline.report.memo import memo
from pipeline.report.numerals import lines
from tests.report.kitchen import kitchen
from tests.report.runs import with_frames

A4, LETTER = (595, 842), (612, 792)


@pytest.fixture(scope="module")
def paper(full: Results) -> bytes:
    return pdf.render(full)["memo.pdf"]


@pytest.fixture(scope="module")
def read(paper: bytes) -> PdfReader:
    return PdfReader(io.BytesIO(paper))


def squeezed(text: str) -> str:
    """``text`` without its white space, which the breaks of lines move."""
    return re.sub(r"\s+", "", text)


def words(reader: PdfReader) -> str:
    """All pages without their feet."""
    return squeezed("".join(re.sub(r"Page \d+ of \d+", "", page.extract_text()) for page in
                            reader.pages))  # fmt: skip


def size(page: Any) -> tuple[int, int]:
    width, height = page.mediabox[2:]
    return round(float(width)), round(float(height))


def test_it_says_what_the_word_file_says(full: Results, read: PdfReader) -> None:
    shown, document = words(read), memo(full)
    for paragraph in document.paragraphs:
        assert squeezed(paragraph.text) in shown
    for table in document.tables:
        for column in table.columns:
            assert squeezed(column.heading) in shown
        for row in table.page_rows:
            for cell in row:
                assert all(squeezed(line) in shown for line in lines(cell))


def test_its_numbers_are_those_of_the_data(full: Results, read: PdfReader) -> None:
    """Each coefficient, rounded here anew from the frame of estimates."""
    shown = words(read)
    frame = full.tables["estimates"]
    asked = frame[(frame["term"] == full.study.treatment) & (frame["stage"] == "")]
    assert len(asked) == 4
    for value in asked["coefficient"].astype(float):
        assert f"{value * 1e4:,.0f}".replace("-", "−") in shown


@pytest.mark.skipif(shutil.which("pdftotext") is None, reason="needs pdftotext of poppler-utils")
def test_another_reader_finds_the_same_words(full: Results, paper: bytes) -> None:
    done = subprocess.run(["pdftotext", "-", "-"], input=paper, capture_output=True, check=True)
    shown = squeezed(re.sub(r"Page \d+ of \d+", "", done.stdout.decode()))
    for paragraph in memo(full).paragraphs:
        if "\n" not in paragraph.text:
            assert squeezed(paragraph.text)[:60] in shown


def test_headings_are_bookmarks(full: Results, read: PdfReader) -> None:
    def titles(entries: list[Any]) -> list[str]:
        return [t for e in entries for t in (titles(e) if isinstance(e, list) else [e.title])]

    assert titles(read.outline) == [section.heading for section in memo(full).sections]
    assert all(isinstance(e, Destination | list) for e in read.outline)


def test_it_is_tagged_with_title_and_language(full: Results, read: PdfReader) -> None:
    root = read.trailer["/Root"]
    assert root["/MarkInfo"]["/Marked"]
    assert root["/Lang"] == "en"
    assert root["/ViewerPreferences"]["/DisplayDocTitle"]
    assert b"<pdfuaid:part>1</pdfuaid:part>" in root["/Metadata"].get_data()
    assert read.metadata is not None
    assert read.metadata.title == full.study.title
    kinds = set(_tags(root["/StructTreeRoot"]))
    assert {"/H1", "/P", "/Table", "/TH", "/TD", "/Caption", "/Figure", "/Link", "/L"} <= kinds


def test_a_document_without_a_title_has_one_for_the_reader() -> None:
    data = pdf.file(Document("\x00 ", "s", (Section("S", (Paragraph(("p",)),)),)))
    found = PdfReader(io.BytesIO(data)).metadata
    assert found is not None
    assert found.title == "Untitled"


def _tags(node: Any) -> list[str]:
    found = [node["/S"]] if "/S" in node else []
    inner = node.get("/K", [])
    for child in inner if isinstance(inner, list) else [inner]:
        held = child.get_object() if hasattr(child, "get_object") else child
        if isinstance(held, dict):
            found += _tags(held)
    return found


def test_every_figure_is_described_and_drawn_in_lines(full: Results, read: PdfReader) -> None:
    alts: list[str] = []

    def visit(node: Any) -> None:
        if node.get("/S") == "/Figure":
            alts.append(str(node.get("/Alt", "")))
        inner = node.get("/K", [])
        for child in inner if isinstance(inner, list) else [inner]:
            held = child.get_object() if hasattr(child, "get_object") else child
            if isinstance(held, dict):
                visit(held)

    visit(read.trailer["/Root"]["/StructTreeRoot"])
    assert [figure.alt for figure in memo(full).figures] == [alt for alt in alts if alt]
    assert not [image for page in read.pages for image in page.images]


def test_every_font_is_inside(read: PdfReader) -> None:
    found = set()
    for page in read.pages:
        for font in page["/Resources"].get("/Font", {}).values():
            inner = font.get_object()["/DescendantFonts"][0].get_object()
            facts = inner["/FontDescriptor"]
            found.add(str(facts["/FontName"]))
            assert {"/FontFile2", "/FontFile3"} & set(facts)
            assert "/ToUnicode" in font.get_object()
    assert len(found) >= 2


@pytest.mark.parametrize(("page", "expected"), [("A4", A4), ("Letter", LETTER)])
def test_the_pages_have_the_size_asked_for(
    full: Results, page: str, expected: tuple[int, int]
) -> None:
    run = with_frames(replace(full, study=replace(full.study, house=House(page=page))))
    sizes = [size(leaf) for leaf in PdfReader(io.BytesIO(pdf.render(run)["memo.pdf"])).pages]
    assert set(sizes) == {expected, expected[::-1]}
    assert sizes[-1] == expected[::-1]


def test_pages_are_numbered(read: PdfReader) -> None:
    for at, page in enumerate(read.pages, 1):
        assert f"Page {at} of {len(read.pages)}" in page.extract_text()


def test_the_memo_is_short(read: PdfReader) -> None:
    """Two to four pages before the appendix."""
    pages = [page.extract_text() for page in read.pages]
    first = next(at for at, text in enumerate(pages) if text.lstrip().startswith("Appendix"))
    assert 2 <= first <= 4


def test_a_long_table_repeats_its_heading_and_loses_nothing() -> None:
    columns = (Column("Deal"), Column("Words", prose=True), Column("Number"))
    rows = tuple((Text(f"deal {at}"), Text("word " * 30), Number(at, 0)) for at in range(1, 120))
    table = Table("long", Paragraph(("Long",)), columns, rows)
    data = pdf.file(Document("t", "s", (Section("S", (table,)),)))
    pages = [page.extract_text() for page in PdfReader(io.BytesIO(data)).pages]
    assert len(pages) > 3
    assert all("Deal" in page and "Number" in page for page in pages)
    found = [int(at) for page in pages for at in re.findall(r"deal (\d+)", page)]
    assert found == list(range(1, 120))


def test_a_row_longer_than_a_page_is_broken_not_cut() -> None:
    text = " ".join(f"word{at}" for at in range(2500))
    table = Table("tall", Paragraph(("Tall",)), (Column("A"), Column("B")),
                  ((Text("row"), Text(text)),))  # fmt: skip
    data = pdf.file(Document("t", "s", (Section("S", (table,)),)))
    shown = squeezed("".join(page.extract_text() for page in PdfReader(io.BytesIO(data)).pages))
    assert "word0word1" in shown
    assert "word2499" in shown


@pytest.mark.skipif(shutil.which("pdftotext") is None, reason="needs pdftotext of poppler-utils")
def test_every_word_ends_inside_the_page() -> None:
    data = pdf.file(kitchen())
    done = subprocess.run(["pdftotext", "-bbox", "-", "-"], input=data, capture_output=True,
                          check=True)  # fmt: skip
    for page in done.stdout.decode().split("<page ")[1:]:
        width = float(re.findall(r'width="([\d.]+)"', page)[0])
        ends = [float(x) for x in re.findall(r'xMax="([\d.]+)"', page)]
        assert max(ends) <= width - 15 * 72 / 25.4


def test_words_never_become_commands(full: Results) -> None:
    evil = '#panic("x") #set page(width: 1pt) *b* _i_ @r <l> `c` $x$ // \\ ] ['
    study = replace(full.study, title=evil, question=evil, labels={"paid_in_shares": evil})
    data = pdf.render(with_frames(replace(full, study=study)))["memo.pdf"]
    reader = PdfReader(io.BytesIO(data))
    assert squeezed(evil) in words(reader)
    assert reader.metadata is not None
    assert reader.metadata.title == evil
    assert size(reader.pages[0]) == A4


def test_the_same_document_gives_the_same_bytes(full: Results, paper: bytes) -> None:
    assert pdf.file(memo(full)) == paper
    assert b"/CreationDate" not in paper
    assert b"/ModDate" not in paper


def test_a_memo_of_one_deal(bare: Results) -> None:
    reader = PdfReader(io.BytesIO(pdf.render(bare)["memo.pdf"]))
    assert "theonedeal" in words(reader)
    assert {size(page) for page in reader.pages} == {A4}


def test_fonts_are_borrowed_only_for_what_is_lacking() -> None:
    assert lacking("Łódź Ω Ж χ² ≤ −1 “x” …") == ""
    assert lacking("A 会 B 社") == "会社"


def test_the_two_memos_hold_the_same_tables(full: Results) -> None:
    import docx as library

    word = library.Document(io.BytesIO(docx.file(memo(full))))
    shown = words(PdfReader(io.BytesIO(pdf.file(memo(full)))))
    cells = [cell.text for table in word.tables for row in table.rows for cell in row.cells]
    assert len(cells) > 100
    assert all(squeezed(cell) in shown for cell in cells)
