"""Renderer of the memo as a PDF: the same words and numbers as the Word file, ready to send.

Tagged, with bookmarks, fonts and drawings inside; no clock and no chance in its bytes.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from pipeline.core.house import Logo
from pipeline.core.results import Results
from pipeline.report.document import (
    NOTHING,
    SHORTENED,
    Block,
    Bullets,
    Callout,
    Document,
    Figure,
    Paragraph,
    Reference,
    Row,
    Section,
    Table,
)
from pipeline.report.docx_parts import column_widths
from pipeline.report.figures import svg
from pipeline.report.fonts import lacking
from pipeline.report.logo import placed
from pipeline.report.memo import memo
from pipeline.report.numerals import broken, clean, lines
from pipeline.report.typeset import typeset

Part = dict[str, Any]

# A row of more characters may break across pages: kept whole it might not fit on one.
WHOLE = 900
# A longer run without a place to break gets some, so that a narrow column never clips it.
IN_CELLS, IN_PROSE = 14, 60
BREAK = "\N{ZERO WIDTH SPACE}"
WIDTH = 10_000
FIGURE_SHARE = 0.8
UNTITLED = "Untitled"


def render(results: Results) -> dict[str, bytes]:
    """``memo.pdf``."""
    return {"memo.pdf": file(memo(results))}


def file(document: Document) -> bytes:
    """The document as a PDF; the same bytes for the same document.

    Where it holds characters that the packed fonts lack, the machine's own fonts are borrowed.
    """
    return typeset(_paper(document), borrow=bool(lacking(_words(document))))


def _words(document: Document) -> str:
    """Everything the document prints."""
    cells = (
        line for table in document.tables for row in table.page_rows for cell in row
        for line in lines(cell)
    )  # fmt: skip
    heads = (column.heading for table in document.tables for column in table.columns)
    prose = (f"{paragraph.lead}{paragraph.text}" for paragraph in document.paragraphs)
    titles = (section.heading for section in document.sections)
    top = (document.title, document.subtitle, document.house.footer)
    return clean("".join((*top, *titles, *prose, *heads, *cells)))


def _paper(document: Document) -> Part:
    house, numbers = document.house, document.numbers
    return {
        "title": _plain(document.title) or UNTITLED,
        "short": _plain(document.title)[:90],
        "subtitle": _plain(document.subtitle),
        "page": house.page,
        "footer": _plain(house.footer),
        "logo": _logo(house.logo),
        "sections": [_section(section, numbers) for section in document.sections],
    }


def _plain(text: str) -> str:
    return " ".join(clean(text).split())


def _logo(logo: Logo | None) -> Part | None:
    if logo is None:
        return None
    width, height = placed(logo)
    kind = "jpg" if logo.kind == "jpeg" else logo.kind
    return {"data": list(logo.data), "kind": kind, "width": width, "height": height,
            "words": clean(logo.words)}  # fmt: skip


def _section(section: Section, numbers: Mapping[str, str]) -> Part:
    return {
        "heading": _plain(section.heading),
        "level": section.level - 1,
        "wide": section.wide,
        "fresh": section.fresh,
        "blocks": [_block(block, numbers) for block in section.blocks],
    }


def _block(block: Block, numbers: Mapping[str, str]) -> Part:
    match block:
        case Paragraph():
            return {"kind": "paragraph", **_paragraph(block), "quotation": block.quotation}
        case Bullets(items):
            return {"kind": "bullets", "items": [_paragraph(item) for item in items]}
        case Callout(heading, paragraphs):
            inside = [_paragraph(paragraph) for paragraph in paragraphs]
            return {"kind": "callout", "heading": _plain(heading), "paragraphs": inside}
        case Table():
            return {"kind": "table", **_table(block, numbers)}
        case Figure():
            return {"kind": "figure", **_figure(block, numbers)}


def _paragraph(paragraph: Paragraph) -> Part:
    return {"lead": clean(paragraph.lead), "pieces": list(_pieces(paragraph))}


def _pieces(paragraph: Paragraph) -> Iterator[Part]:
    for piece in paragraph.pieces:
        text = clean(piece if isinstance(piece, str) else piece.text)
        to = _anchor(piece.name) if isinstance(piece, Reference) else ""
        yield {"text": _breakable(text, IN_PROSE), "to": to}


def _anchor(name: str) -> str:
    return "part-" + "".join(mark if mark.isalnum() else "-" for mark in name)


def _breakable(text: str, longest: int) -> str:
    """``text`` with places to break in runs of more than ``longest`` characters."""
    return " ".join(BREAK.join(broken(word, longest)) for word in text.split(" "))


def _table(table: Table, numbers: Mapping[str, str]) -> Part:
    widths = column_widths(table, WIDTH)
    columns = [
        {"heading": _breakable(_plain(column.heading), IN_CELLS), "width": width / WIDTH,
         "right": table.numeric(at)}
        for at, (column, width) in enumerate(zip(table.columns, widths, strict=True))
    ]  # fmt: skip
    notes = [_paragraph(note) for note in table.notes]
    if not table.rows:
        notes.insert(0, _paragraph(Paragraph((NOTHING,))))
    if table.shortened:
        notes.append(_paragraph(Paragraph((SHORTENED,))))
    return {
        "name": _anchor(table.name),
        "called": numbers.get(table.name, ""),
        "title": _paragraph(table.title),
        "columns": columns,
        "rows": [_row(row) for row in table.page_rows],
        "footer": table.footer,
        "form": table.form,
        "notes": notes,
    }


def _row(row: Row) -> Part:
    cells = [[_breakable(line, IN_CELLS) for line in lines(cell)] for cell in row]
    return {"cells": cells, "long": sum(len(line) for cell in cells for line in cell) > WHOLE}


def _figure(figure: Figure, numbers: Mapping[str, str]) -> Part:
    return {
        "name": _anchor(figure.name),
        "called": numbers.get(figure.name, ""),
        "title": _paragraph(figure.title),
        "below": _paragraph(figure.caption),
        "alt": clean(figure.alt),
        "share": FIGURE_SHARE,
        "svg": svg(figure),
    }
