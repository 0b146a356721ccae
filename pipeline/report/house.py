"""A document in the house's style: its dates reworded, its references numbered."""

from __future__ import annotations

from dataclasses import replace

import pandas as pd

from pipeline.core.house import ISO
from pipeline.report.days import day_of, redated
from pipeline.report.document import (
    Block,
    Bullets,
    Callout,
    Cell,
    Day,
    Document,
    Figure,
    Interval,
    Paragraph,
    Piece,
    Reference,
    Table,
    Text,
    Verbatim,
)

# Words that are quoted as they stand: the analyst's own, publications, and cells of her files.
QUOTED = ("study", "source")
FILES = ("findings", "differences")


def styled(document: Document) -> Document:
    """The document with dates in the house's way and the numbers of what it refers to.

    Raises:
        KeyError: for a reference to what a numbered document does not hold.
    """
    numbers, dates = document.numbers, document.house.dates
    sections = tuple(
        replace(section, blocks=tuple(_block(block, dates, numbers) for block in section.blocks))
        for section in document.sections
    )
    return replace(document, sections=sections)


def _block(block: Block, dates: str, numbers: dict[str, str]) -> Block:
    match block:
        case Paragraph():
            return _paragraph(block, dates, numbers)
        case Bullets(items):
            return Bullets(tuple(_paragraph(item, dates, numbers) for item in items))
        case Callout(heading, paragraphs):
            return Callout(heading, tuple(_paragraph(p, dates, numbers) for p in paragraphs))
        case Table():
            rows = block.rows
            if block.name not in FILES:
                rows = tuple(tuple(_cell(cell, dates) for cell in row) for row in rows)
            notes = tuple(_paragraph(note, dates, numbers) for note in block.notes)
            title = _paragraph(block.title, dates, numbers)
            return replace(block, title=title, rows=rows, notes=notes)
        case Figure():
            return _figure(block, dates, numbers)


def _figure(figure: Figure, dates: str, numbers: dict[str, str]) -> Figure:
    words = {
        "title": _paragraph(figure.title, dates, numbers),
        "caption": _paragraph(figure.caption, dates, numbers),
        "alt": redated(figure.alt, dates),
    }
    if dates == ISO:
        return replace(figure, **words)  # type: ignore[arg-type]
    beside = {group: redated(text, dates) for group, text in figure.beside.items()}
    return replace(figure, **words, data=_drawn(figure.data, dates), beside=beside)  # type: ignore[arg-type]


def _drawn(data: pd.DataFrame, dates: str) -> pd.DataFrame:
    """The data drawn, its labels reworded."""
    return data.map(lambda value: redated(value, dates) if isinstance(value, str) else value)


def _paragraph(paragraph: Paragraph, dates: str, numbers: dict[str, str]) -> Paragraph:
    pieces = tuple(_piece(piece, dates, numbers) for piece in paragraph.pieces)
    return replace(paragraph, pieces=pieces, lead=redated(paragraph.lead, dates))


def _piece(piece: Piece, dates: str, numbers: dict[str, str]) -> Piece:
    match piece:
        case str():
            return redated(piece, dates)
        case Reference(name):
            return Reference(name, numbers[name])
        case Verbatim(text, origin) if origin not in QUOTED:
            return replace(piece, text=redated(text, dates))
    return piece


def _cell(cell: Cell, dates: str) -> Cell:
    match cell:
        case Text(text):
            day = day_of(text)
            if day and not cell.href:
                return Day(day, dates)
            return replace(cell, text=redated(text, dates))
        case Interval() if cell.words:
            return replace(cell, words=redated(cell.words, dates))
    return cell
