"""A table as part of a page, written without a template: a run has hundreds of pages of them."""

from __future__ import annotations

import re
from collections.abc import Mapping
from functools import lru_cache
from html import escape

from markupsafe import Markup

from pipeline.report.document import (
    NOTHING,
    SHORTENED,
    Cell,
    Interval,
    Number,
    Paragraph,
    Quote,
    Reference,
    Table,
    Text,
)
from pipeline.report.numerals import clean, lines, shown, slug

_MOMENT = re.compile(r"\d{4}-\d\d-\d\d \d\d:\d\d")


def table_markup(table: Table, numbers: Mapping[str, str]) -> Markup:
    """The table with its title and notes; every word escaped.

    ``numbers`` says what the tables and figures of a numbered document are called.
    """
    called = f"{numbers[table.name]}. " if table.name in numbers else ""
    form = " form" if table.form else ""
    parts = [
        f'<div class="table{form}" id="table-{slug(table.name)}">',
        f'<p class="title">{called}{prose_markup(table.title, numbers)}</p>',
        *(_grid(table) if table.rows else (f'<p class="note">{NOTHING}</p>',)),
        *(f'<p class="note">{prose_markup(note, numbers)}</p>' for note in table.notes),
        "</div>",
    ]
    return Markup("\n".join(parts) + "\n")


def prose_markup(paragraph: Paragraph, numbers: Mapping[str, str]) -> str:
    """A paragraph's words, its quoted numbers marked with where they stand, references linked."""
    lead = f"<b>{_words(paragraph.lead)}</b> " if paragraph.lead else ""
    found = [lead]
    for piece in paragraph.pieces:
        if isinstance(piece, str):
            found.append(_words(piece))
        elif isinstance(piece, Quote):
            title = _words(source(piece))
            found.append(f'<data value="{piece.value}" title="{title}">{escape(piece.text)}</data>')
        elif isinstance(piece, Reference):
            kind = numbers.get(piece.name, "").partition(" ")[0].lower()
            found.append(_linked(_words(piece.text), f"#{kind}-{slug(piece.name)}"))
        else:
            found.append(_linked(_words(piece.text), piece.href))
    return "".join(found)


def source(quote: Quote) -> str:
    """Where a quoted number stands, for the person who points at it."""
    where = clean(", ".join(f"{name} {value}" for name, value in quote.where))
    return f"data/{quote.table}.parquet: {quote.column} where {where}"


def numeric(cell: Cell) -> bool:
    """Whether a cell's content, a number or a date, stays on one line."""
    worded = isinstance(cell, Text) and not _MOMENT.fullmatch(cell.text)
    worded = worded or (isinstance(cell, Interval) and bool(cell.words))
    return cell is not None and not worded


def column_class(table: Table, at: int) -> str:
    """What a column holds: plain numbers, sentences, or other."""
    if table.columns[at].prose:
        return "prose"
    return "figures" if table.numeric(at) else "words"


def _grid(table: Table) -> list[str]:
    kinds = [column_class(table, at) for at in range(len(table.columns))]
    label = f"{_words(table.title.text)} (table {slug(table.name, ' ')})"
    found = [
        f'<div class="scroll" tabindex="0" role="region" aria-label="{label}">',
        "<table>",
        "<thead><tr>",
        *(_heading(column.title, column.unit, kind)
          for column, kind in zip(table.columns, kinds, strict=True)),
        "</tr></thead>",
        "<tbody>",
    ]  # fmt: skip
    for at, row in enumerate(table.page_rows):
        found.append('<tr class="footer">' if at == table.footer else "<tr>")
        found += [_cell(cell, kind, place) for place, (cell, kind) in
                  enumerate(zip(row, kinds, strict=True))]  # fmt: skip
        found.append("</tr>")
    found += ["</tbody>", "</table>", "</div>"]
    return [*found, f'<p class="note">{SHORTENED}</p>'] if table.shortened else found


def _heading(title: str, unit: str, kind: str) -> str:
    if not clean(title):
        return "<td></td>"
    below = f'<span class="unit">{_words(unit)}</span>' if unit else ""
    return f'<th scope="col" class="{kind}"><span>{_words(title)}</span>{below}</th>'


def _cell(cell: Cell, kind: str, place: int) -> str:
    if isinstance(cell, Text):
        return _worded(cell.text, cell.href, kind, place == 0)
    if isinstance(cell, Number) and place:
        return f'<td class="{kind} number"><span>{_words(shown(cell))}</span></td>'
    spans = "".join(f"<span>{escape(line)}</span>" for line in lines(cell))
    if place == 0:
        return f'<th scope="row">{spans}</th>' if spans else "<td></td>"
    number = " number" if numeric(cell) else ""
    return f'<td class="{kind}{number}">{spans}</td>'


@lru_cache(maxsize=2**14)
def _worded(text: str, href: str, kind: str, first: bool) -> str:
    """A cell of words, most of which stand on every page of a deal."""
    cell = Text(text, href)
    spans = _linked("".join(f"<span>{escape(line)}</span>" for line in lines(cell)), href)
    if first:
        return f'<th scope="row">{spans}</th>' if spans else "<td></td>"
    number = " number" if numeric(cell) else ""
    return f'<td class="{kind}{number}">{spans}</td>'


def _linked(words: str, href: str) -> str:
    return f'<a href="{escape(href)}">{words}</a>' if href and words else words


@lru_cache(maxsize=2**14)
def _words(text: str) -> str:
    return escape(clean(text))
