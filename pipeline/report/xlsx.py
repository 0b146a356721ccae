"""Renderer of the tables as a workbook: one sheet a table, numbers as numbers.

Numbers keep full precision under a number format; words are written as strings whatever they
begin with, so that no cell can become a formula.
"""

from __future__ import annotations

import io
import math
import re
from datetime import datetime, time
from itertools import zip_longest
from typing import Any

import xlsxwriter
from PIL import Image

from pipeline.core.house import House, Logo
from pipeline.core.results import Results
from pipeline.report.content import report
from pipeline.report.document import (
    Bracketed,
    Cell,
    Day,
    Document,
    Interval,
    Number,
    Statistic,
    Table,
    Text,
)
from pipeline.report.logo import pixels, placed
from pipeline.report.numerals import clean, lines, shown

Part = Number | Day | str | None
Formats = dict[str, Any]

# A fixed date: the same results give the same bytes whenever they are written.
WRITTEN = datetime(2000, 1, 1)
BROADEST = 60
LINE = 15.0
CONTENTS = "Contents"
# Real dates under a number format, the month's name in the language of its locale code.
DATES = {
    "iso": "yyyy-mm-dd",
    "english": "[$-809]d mmmm yyyy",
    "american": "[$-409]mmmm d, yyyy",
    "german": "[$-407]d. mmmm yyyy",
    "french": "[$-40C]d mmmm yyyy",
}
# What the library takes a picture to have that does not say.
DPI_WITHOUT = 96
PAPER = {"A4": 9, "Letter": 1}


def render(results: Results) -> dict[str, bytes]:
    """``tables.xlsx``."""
    return {"tables.xlsx": workbook(report(results))}


def workbook(document: Document) -> bytes:
    """The document's tables as a workbook; the first sheet lists the others."""
    buffer = io.BytesIO()
    options = {
        "in_memory": True,
        "strings_to_formulas": False,
        "strings_to_urls": False,
        "strings_to_numbers": False,
    }
    book = xlsxwriter.Workbook(buffer, options)
    book.set_properties({"title": clean(document.title), "created": WRITTEN})
    formats: Formats = {}
    tables = [table for table in document.tables if not table.form]
    names = sheet_names(tables)
    _contents(book, formats, document, tables, names)
    for table, name in zip(tables, names, strict=True):
        _sheet(book, formats, table, name)
    for sheet in book.worksheets():
        _paper(sheet, document.house)
    book.close()
    return buffer.getvalue()


def sheet_names(tables: list[Table]) -> list[str]:
    """A name a sheet: at most 31 characters, none that a sheet name may not hold, all different."""
    taken = {CONTENTS.lower()}
    names = []
    for table in tables:
        stem = re.sub(r"[\[\]:*?/\\']", " ", clean(table.name)).strip()[:28] or "table"
        name, extra = stem, 2
        while name.lower() in taken:
            name, extra = f"{stem} {extra}", extra + 1
        taken.add(name.lower())
        names.append(name)
    return names


def parts(cell: Cell) -> tuple[Part, ...]:
    """What a cell holds, one sheet cell each."""
    match cell:
        case None:
            return (None,)
        case Text(text):
            return (clean(text) or None,)
        case Number():
            return (cell,)
        case Day():
            return (cell,)
        case Bracketed(estimate, inside):
            return (estimate, inside)
        case Interval(estimate, low, high, words):
            return (estimate, clean(words), None) if words else (estimate, low, high)
        case Statistic(value, p, adjusted):
            return (value, p, adjusted)


def part_titles(cells: list[Cell]) -> tuple[str, ...]:
    """What the sheet columns of one table column are called."""
    intervals = any(isinstance(cell, Interval) for cell in cells)
    tests = any(isinstance(cell, Statistic) for cell in cells)
    if any(isinstance(cell, Bracketed) for cell in cells):
        below = "in brackets" + (", or p" if tests else "") + (", or low" if intervals else "")
        return ("estimate", below, "high") if intervals or tests else ("estimate", below)
    if intervals:
        return ("value", "low, or p", "high") if tests else ("estimate", "low", "high")
    return ("statistic", "p", "Holm p") if tests else ("",)


def _paper(sheet: Any, house: House) -> None:
    """The sheet as printed: the paper's size, the house's words and the page at its foot."""
    words = clean(house.footer).replace("&", "&&")
    sheet.set_footer(f"&L{words[:200]}&RPage &P of &N")
    sheet.set_paper(PAPER[house.page])
    sheet.set_landscape()
    sheet.fit_to_pages(1, 0)


def _logo(sheet: Any, logo: Logo | None) -> None:
    """The house's logo beside the list of sheets."""
    if logo is None:
        return
    data = pixels(logo)
    with Image.open(io.BytesIO(data)) as picture:
        across, down = picture.size
        dpi = picture.info.get("dpi", (DPI_WITHOUT, DPI_WITHOUT))
    width, height = (size / 25.4 for size in placed(logo))
    facts = {
        "image_data": io.BytesIO(data),
        "x_scale": width * dpi[0] / across,
        "y_scale": height * dpi[1] / down,
        "description": clean(logo.words),
    }
    sheet.insert_image(0, 4, f"logo.{logo.kind}", facts)


def _contents(
    book: Any, formats: Formats, document: Document, tables: list[Table], names: list[str]
) -> None:
    sheet = book.add_worksheet(CONTENTS)
    bold = _format(book, formats, bold=True)
    sheet.write_string(0, 0, clean(document.title), bold)
    for column, heading in enumerate(("Sheet", "Table", "Rows")):
        sheet.write_string(2, column, heading, _format(book, formats, bold=True, bottom=1))
    for row, (table, name) in enumerate(zip(tables, names, strict=True), start=3):
        sheet.write_string(row, 0, name)
        sheet.write_string(row, 1, clean(table.title.text))
        sheet.write_number(row, 2, len(table.rows))
    sheet.set_column(0, 0, 32)
    sheet.set_column(1, 1, BROADEST)
    _logo(sheet, document.house.logo)


def _sheet(book: Any, formats: Formats, table: Table, name: str) -> None:
    sheet = book.add_worksheet(name)
    sheet.write_string(0, 0, clean(table.title.text), _format(book, formats, bold=True))
    titles = [part_titles([row[at] for row in table.rows]) for at in range(len(table.columns))]
    widths = [_width(table, at, title) for at, title in enumerate(titles)]
    first = _headings(book, formats, sheet, table, titles)
    for at, row in enumerate(table.rows, start=first):
        _row(book, formats, sheet, at, row, titles, at - first == table.footer)
        sheet.set_row(at, LINE * _height(row, titles, widths))
    for at, note in enumerate(table.notes, start=first + len(table.rows) + 1):
        sheet.write_string(at, 0, clean(note.text))
    column = 0
    for width, names in zip(widths, titles, strict=True):
        sheet.set_column(column, column + len(names) - 1, width + 2)
        column += len(names)
    sheet.freeze_panes(first, 1)
    sheet.repeat_rows(2, first - 1)


def _width(table: Table, at: int, names: tuple[str, ...]) -> int:
    """Width in characters of each sheet column of one table column."""
    cells = [row[at] for row in table.rows]
    if len(names) > 1:
        odd = any(isinstance(cell, Interval) and cell.words for cell in cells)
        numbers = (part for cell in cells for part in parts(cell) if isinstance(part, Number))
        return max(18 if odd else 12, *(len(shown(number)) for number in numbers), 0)
    texts = [text for cell in cells for text in lines(cell)]
    longest = max((len(line) for text in texts for line in text.splitlines()), default=0)
    return min(max(longest, len(table.columns[at].heading), 8), BROADEST)


def _height(row: tuple[Cell, ...], titles: list[tuple[str, ...]], widths: list[int]) -> int:
    """Lines of text a row needs."""
    needs = [1]
    for cell, names, width in zip(row, titles, widths, strict=True):
        room = (width + 2) * len(names) - 1
        text = cell.text if isinstance(cell, Text) else ""
        if isinstance(cell, Interval):
            text, room = cell.words, width
        needs.append(sum(-(-max(len(line), 1) // room) for line in text.splitlines()))
    return min(max(needs), 25)


def _headings(
    book: Any, formats: Formats, sheet: Any, table: Table, titles: list[tuple[str, ...]]
) -> int:
    """Write the heading rows; return the first row below them."""
    two = any(len(title) > 1 for title in titles)
    column = 0
    for at, (facts, names) in enumerate(zip(table.columns, titles, strict=True)):
        numbers = any(isinstance(row[at], Number) for row in table.rows)
        look: dict[str, Any] = {"bold": True, "align": "right" if numbers else "left"}
        look |= {} if numbers else {"indent": int(column > 0)}
        rule = {} if two else {"bottom": 1}
        last = column + len(names) - 1
        _words(sheet, 2, column, last, clean(facts.heading), _format(book, formats, **look, **rule))
        for extra, name in enumerate(names if two else ()):
            side = {"align": "right"} if name else {}
            ruled = _format(book, formats, bold=True, bottom=1, **side)
            sheet.write_string(3, column + extra, name, ruled)
        column = last + 1
    return 4 if two else 3


def _words(sheet: Any, row: int, first: int, last: int, text: str, look: Any) -> None:
    """Write words over one sheet column or several."""
    if last > first:
        sheet.merge_range(row, first, row, last, "", look)
    sheet.write_string(row, first, text, look)


def _row(book: Any, formats: Formats, sheet: Any, at: int, row: tuple[Cell, ...],
         titles: list[tuple[str, ...]], footer: bool) -> None:  # fmt: skip
    rule = {"top": 1} if footer else {}
    column = 0
    for cell, names in zip(row, titles, strict=True):
        last = column + len(names) - 1
        if isinstance(cell, Text) and cell.text:
            side: dict[str, Any] = {"align": "left", "indent": int(column > 0), **rule}
            look = _format(book, formats, text_wrap=True, valign="top", **side)
            _words(sheet, at, column, last, clean(cell.text), look)
        else:
            for extra, part in zip_longest(range(len(names)), parts(cell)[: len(names)]):
                _write(book, formats, sheet, at, column + extra, part, rule)
        column = last + 1


def _write(
    book: Any, formats: Formats, sheet: Any, row: int, column: int, part: Part, rule: dict[str, Any]
) -> None:
    match part:
        case None:
            if rule:
                sheet.write_blank(row, column, None, _format(book, formats, **rule))
        case Number(value, _) if not math.isfinite(value):
            look = _format(book, formats, valign="top", align="right", **rule)
            sheet.write_string(row, column, "no bound" if math.isinf(value) else "", look)
        case Day(day, dates):
            pattern = DATES[dates]
            side: dict[str, Any] = {"align": "left", "indent": int(column > 0), **rule}
            look = _format(book, formats, num_format=pattern, valign="top", **side)
            sheet.write_datetime(row, column, datetime.combine(day, time()), look)
        case Number(value, digits, mark=mark):
            pattern = "#,##0" + (f".{'0' * digits}" if digits else "")
            pattern += f'"{mark}"' if mark else ""
            look = _format(book, formats, num_format=pattern, valign="top", **rule)
            sheet.write_number(row, column, value, look)
        case str():
            look = _format(book, formats, text_wrap=True, valign="top", align="left", **rule)
            sheet.write_string(row, column, part, look)


def _format(book: Any, formats: Formats, **facts: Any) -> Any:
    """One format object for each set of facts."""
    key = repr(sorted(facts.items()))
    if key not in formats:
        formats[key] = book.add_format(facts)
    return formats[key]
