"""Renderer of the memo: a document to edit, with real tables."""

from __future__ import annotations

import io
import zipfile
from collections.abc import Mapping
from datetime import datetime
from typing import Any

import docx
from docx.enum.section import WD_ORIENT, WD_SECTION
from docx.enum.style import WD_STYLE_TYPE
from docx.shared import Mm, Pt, RGBColor

from pipeline.core.house import Logo
from pipeline.core.results import Results
from pipeline.report.document import (
    Block,
    Bullets,
    Callout,
    Document,
    Figure,
    Paragraph,
    Section,
    Table,
)
from pipeline.report.docx_fields import page_numbers, runs
from pipeline.report.docx_parts import (
    TABLE_STYLES,
    add_table,
    border,
    caption,
    keep_with_next,
    set_font,
    table_style,
)
from pipeline.report.figures import png
from pipeline.report.logo import pixels, placed
from pipeline.report.memo import memo
from pipeline.report.numerals import clean

# A fixed date: the same results give the same bytes whenever they are written.
WRITTEN = datetime(2000, 1, 1)
ZIP_DATE = (1980, 1, 1, 0, 0, 0)
FAINT = RGBColor(0x60, 0x5A, 0x52)
PAPER: Mapping[str, tuple[int, int]] = {
    "A4": (Mm(210), Mm(297)),
    "Letter": (Mm(215.9), Mm(279.4)),
}
MARGIN = Mm(20)
HEADINGS = {"Title": 20, "Heading 1": 15, "Heading 2": 13, "Heading 3": 11}


def render(results: Results) -> dict[str, bytes]:
    """``memo.docx``."""
    return {"memo.docx": file(memo(results))}


def file(document: Document) -> bytes:
    """The document as a Word file; the same bytes for the same document."""
    word = docx.Document()
    _styles(word)
    _properties(word, document)
    size = PAPER[document.house.page]
    _page(word.sections[0], size, wide=False)
    _logo(word, document.house.logo)
    word.add_paragraph(clean(document.title), style="Title")
    subtitle = word.add_paragraph(clean(document.subtitle))
    subtitle.runs[0].font.color.rgb = FAINT
    wide = False
    for section in document.sections:
        if section.wide != wide:
            _page(word.add_section(WD_SECTION.NEW_PAGE), size, wide=section.wide)
            wide = section.wide
        _section(word, section, size, document.numbers)
    _footer(word.sections[0].footer, document)
    buffer = io.BytesIO()
    word.save(buffer)
    return _undated(buffer.getvalue())


def _styles(word: Any) -> None:
    set_font(word.styles["Normal"], "Arial", 10)
    word.styles["Normal"].paragraph_format.space_after = Pt(6)
    word.styles["Normal"].paragraph_format.line_spacing = 1.1
    for name, size in HEADINGS.items():
        style = word.styles[name]
        set_font(style, "Georgia", size)
        style.font.color.rgb = RGBColor(0x23, 0x21, 0x1E)
        style.font.bold = name != "Title"
        style.paragraph_format.space_before = Pt(0 if name == "Title" else 12)
        style.paragraph_format.space_after = Pt(4)
        border(style.element.get_or_add_pPr(), None)
    set_font(word.styles["Caption"], "Arial", 9)
    word.styles["Caption"].font.color.rgb = RGBColor(0x23, 0x21, 0x1E)
    word.styles["Caption"].paragraph_format.space_before = Pt(8)
    set_font(word.styles["Footer"], "Arial", 8)
    for name, points in TABLE_STYLES.items():
        style = word.styles.add_style(name, WD_STYLE_TYPE.PARAGRAPH)
        style.base_style = word.styles["Normal"]
        set_font(style, "Arial", points)
        style.paragraph_format.space_after = Pt(1)
        style.paragraph_format.line_spacing = 1.0
    table_style(word)


def _properties(word: Any, document: Document) -> None:
    facts = word.core_properties
    facts.title, facts.author, facts.comments = clean(document.title)[:250], "", ""
    facts.created = facts.modified = WRITTEN
    facts.last_modified_by, facts.revision, facts.language = "", 1, "en"


def _page(section: Any, size: tuple[int, int], *, wide: bool) -> None:
    short, long = size
    section.orientation = WD_ORIENT.LANDSCAPE if wide else WD_ORIENT.PORTRAIT
    section.page_width, section.page_height = (long, short) if wide else (short, long)
    section.left_margin = section.right_margin = MARGIN
    section.top_margin = section.bottom_margin = Mm(12 if wide else 18)


def _section(
    word: Any, section: Section, size: tuple[int, int], numbers: Mapping[str, str]
) -> None:
    heading = word.add_heading(clean(section.heading), section.level - 1)
    heading.paragraph_format.page_break_before = section.fresh or None
    width = size[1 if section.wide else 0] - 2 * MARGIN
    for block in section.blocks:
        _block(word, block, width, numbers)


def _logo(word: Any, logo: Logo | None) -> None:
    if logo is None:
        return
    holder = word.add_paragraph()
    width, height = placed(logo)
    picture = holder.add_run().add_picture(io.BytesIO(pixels(logo)), Mm(width), Mm(height))
    _describe(picture, logo.words)


def _describe(picture: Any, words: str) -> None:
    """Words for readers who cannot see a picture, and no room kept around it."""
    picture._inline.docPr.set("descr", clean(words))
    for side in ("T", "B", "L", "R"):
        picture._inline.set(f"dist{side}", "0")


def _footer(footer: Any, document: Document) -> None:
    """The house's own words if there are any, then the title and the page's number."""
    holder = footer.paragraphs[0]
    if document.house.footer:
        holder.add_run(clean(document.house.footer)).bold = True
        holder.add_run().add_break()
    holder.add_run(f"{clean(document.title)[:90]}    ")
    page_numbers(holder)


def _block(word: Any, block: Block, width: int, numbers: Mapping[str, str]) -> None:
    match block:
        case Paragraph():
            runs(word.add_paragraph(style="Quote" if block.quotation else None), block)
        case Bullets(items):
            for item in items:
                runs(word.add_paragraph(style="List Bullet"), item)
        case Callout(heading, paragraphs):
            _callout(word, heading, paragraphs)
        case Table():
            add_table(word, block, width, numbers)
        case Figure():
            _figure(word, block, width, numbers)


def _callout(word: Any, heading: str, paragraphs: tuple[Paragraph, ...]) -> None:
    first = word.add_paragraph()
    first.add_run(clean(heading)).bold = True
    keep_with_next(first)
    for paragraph in (first, *(runs(word.add_paragraph(), text) for text in paragraphs)):
        paragraph.paragraph_format.left_indent = Mm(4)
        paragraph.paragraph_format.space_after = Pt(3)
        border(paragraph._p.get_or_add_pPr(), "left")


def _figure(word: Any, figure: Figure, width: int, numbers: Mapping[str, str]) -> None:
    caption(word, figure, numbers)
    holder = word.add_paragraph()
    keep_with_next(holder)
    shape = holder.add_run().add_picture(io.BytesIO(png(figure)), width=min(width, Mm(160)))
    _describe(shape, figure.alt)
    below = runs(word.add_paragraph(), figure.caption)
    for run in below.runs:
        run.font.size = Pt(8.5)
        run.font.color.rgb = FAINT


def _undated(data: bytes) -> bytes:
    """The package with fixed dates on its members, which the library stamps with the clock."""
    buffer = io.BytesIO()
    with zipfile.ZipFile(io.BytesIO(data)) as old, zipfile.ZipFile(buffer, "w") as new:
        for name in sorted(old.namelist(), key=lambda n: (n != "[Content_Types].xml", n)):
            member = zipfile.ZipInfo(name, ZIP_DATE)
            member.compress_type = zipfile.ZIP_DEFLATED
            member.external_attr = 0o600 << 16
            new.writestr(member, old.read(name))
    return buffer.getvalue()
