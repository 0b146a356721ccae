"""A workbook of the rows to look at, for whoever keeps the tables.

One sheet a table: what was found in a row, what was expected and what to do, then the row as it
stands in the file, the cells it is about marked by a thick border, bold letters and a note, not by
colour alone. Words are written as strings whatever they begin with, so that none becomes a formula.
"""

from __future__ import annotations

import io
import math
import re
from collections.abc import Mapping, Sequence
from datetime import date, datetime
from typing import Any

import xlsxwriter

from pipeline.core.offending import Offending, OffendingTable, Remark

SUBJECT = "Rows for the keeper of the tables, written by dealwake"
FIRST_SHEET = "Read this first"
HEADS = ("Row in your file", "How it matters", "What", "Where", "Found", "Expected", "What to do")
WIDTHS = (10, 18, 30, 20, 40, 34, 44)
OWN_WIDTH = 16
MUST, LOOK = "must be corrected", "please look at it"
MOST = 5_000
LONGEST_NAME = 31
WRITTEN = datetime(2000, 1, 1)
HOW_TO = (
    "Each further sheet holds the rows of one table that a check stopped at or asks about.",
    "The columns on the left say why; the columns on the right are the row as it stands in the "
    "file. Cells with a thick border and bold letters are the ones meant; a note on them says "
    "what to do.",
    "Please correct the file itself, not this list: the row numbers count its heading as row 1.",
)


def workbook(offending: Offending) -> bytes:
    """The workbook as bytes, the same for the same rows."""
    target = io.BytesIO()
    options = {
        "in_memory": True,
        "strings_to_formulas": False,
        "strings_to_urls": False,
        "strings_to_numbers": False,
    }
    with xlsxwriter.Workbook(target, options) as book:
        book.set_properties({"created": WRITTEN, "subject": SUBJECT})
        formats = _formats(book)
        names = _names(offending)
        _first_sheet(book, offending, names, formats)
        for table, name in zip(offending.tables, names, strict=True):
            _sheet(book.add_worksheet(name), table, formats)
    return target.getvalue()


def is_ours(content: bytes) -> bool:
    """Whether bytes are a workbook that this module wrote."""
    from zipfile import BadZipFile, ZipFile

    try:
        with ZipFile(io.BytesIO(content)) as archive:
            return SUBJECT.encode() in archive.read("docProps/core.xml")
    except (BadZipFile, KeyError):
        return False


def _formats(book: Any) -> dict[str, Any]:
    wrapped = {"text_wrap": True, "valign": "top"}
    marked = {"bold": True, "border": 5, "bg_color": "#FFF2CC", "valign": "top"}
    return {
        "title": book.add_format({"bold": True, "font_size": 14}),
        "head": book.add_format({"bold": True, "text_wrap": True, "valign": "top", "bottom": 2}),
        "own": book.add_format({"bold": True, "text_wrap": True, "valign": "top", "bottom": 2,
                                "italic": True}),
        "words": book.add_format(wrapped),
        "must": book.add_format({**wrapped, "bold": True}),
        "cell": book.add_format({"valign": "top"}),
        "number": book.add_format({"valign": "top", "align": "center", "bold": True}),
        "marked": book.add_format(marked),
    }  # fmt: skip


def _names(offending: Offending) -> list[str]:
    """One sheet name a table, legal and without repeats."""
    taken: list[str] = [FIRST_SHEET.casefold()]
    names = []
    for table in offending.tables:
        plain = re.sub(r"[\[\]:*?/\\']", " ", table.file).strip()[:LONGEST_NAME] or "table"
        again = (f"{plain[: LONGEST_NAME - 5]} ({count})" for count in range(2, 1_000))
        name = (
            plain
            if plain.casefold() not in taken
            else next(other for other in again if other.casefold() not in taken)
        )
        taken.append(name.casefold())
        names.append(name)
    return names


def _first_sheet(
    book: Any, offending: Offending, names: list[str], formats: Mapping[str, Any]
) -> None:
    sheet = book.add_worksheet(FIRST_SHEET)
    sheet.set_landscape()
    sheet.fit_to_pages(1, 0)
    sheet.set_column(0, 0, 34)
    sheet.set_column(1, 5, 30)
    sheet.write_string(0, 0, "Rows that need a look", formats["title"])
    at = 1
    for words in HOW_TO:
        sheet.merge_range(at, 0, at, 5, "", formats["words"])
        sheet.write_string(at, 0, words, formats["words"])
        sheet.set_row(at, 32)
        at += 1
    at = _counts(sheet, at + 1, offending, names, formats)
    if not offending.whole:
        return
    for column, head in enumerate(("Of a whole table", *HEADS[2:])):
        sheet.write_string(at + 1, column, head, formats["head"])
    for line, (file, where, remark) in enumerate(offending.whole, start=at + 2):
        told = (file, remark.title, where, remark.found, remark.expected, remark.remedy)
        for place, text in enumerate(told):
            sheet.write_string(line, place, text, formats["words"])
        sheet.set_row(line, _height(told, (30,) * len(told)))


def _counts(
    sheet: Any, at: int, offending: Offending, names: list[str], formats: Mapping[str, Any]
) -> int:
    """How many rows each sheet holds; gives the next free line."""
    if not offending.tables:
        sheet.write_string(at, 0, "No row was found that needs one.", formats["words"])
        return at + 1
    for column, head in enumerate(("Sheet", "Rows shown", MUST, LOOK)):
        sheet.write_string(at, column, head.capitalize(), formats["head"])
    for table, name in zip(offending.tables, names, strict=True):
        at += 1
        must = {remark.row for remark in table.remarks if remark.must}
        look = {remark.row for remark in table.remarks if not remark.must}
        sheet.write_string(at, 0, name, formats["words"])
        for column, count in enumerate((len(must | look), len(must), len(look)), start=1):
            sheet.write_number(at, column, count, formats["words"])
        if len(table.remarks) > MOST:
            sheet.write_string(at, 4, f"The first {MOST:,} remarks of {len(table.remarks):,}.",
                               formats["words"])  # fmt: skip
    return at + 1


def _sheet(sheet: Any, table: OffendingTable, formats: Mapping[str, Any]) -> None:
    for column, (head, width) in enumerate(zip(HEADS, WIDTHS, strict=True)):
        sheet.write_string(0, column, head, formats["head"])
        sheet.set_column(column, column, width)
    for column, name in enumerate(table.columns, start=len(HEADS)):
        sheet.write_string(0, column, name, formats["own"])
        sheet.set_column(column, column, OWN_WIDTH)
    sheet.set_row(0, 30)
    shown = table.remarks[:MOST]
    for line, remark in enumerate(shown, start=1):
        _remark(sheet, line, remark, formats)
        about = {_loose(name) for name in remark.columns}
        cells = table.cells.get(remark.row, ())
        for column, (name, cell) in enumerate(zip(table.columns, cells, strict=False)):
            place = column + len(HEADS)
            meant = _loose(name) in about
            _cell(sheet, line, place, cell, formats["marked" if meant else "cell"])
            if meant:
                sheet.write_comment(line, place, f"{remark.title}. {remark.remedy}")
    sheet.freeze_panes(1, 1)
    sheet.set_landscape()
    sheet.fit_to_pages(1, 0)
    sheet.repeat_rows(0)
    sheet.autofilter(0, 0, len(shown), len(HEADS) + len(table.columns) - 1)


def _remark(sheet: Any, line: int, remark: Remark, formats: Mapping[str, Any]) -> None:
    sheet.write_number(line, 0, remark.row, formats["number"])
    sheet.write_string(line, 1, MUST if remark.must else LOOK,
                       formats["must" if remark.must else "words"])  # fmt: skip
    where = ", ".join(remark.columns) or "the whole row"
    told = (remark.title, where, remark.found, remark.expected, remark.remedy)
    for column, text in enumerate(told, start=2):
        sheet.write_string(line, column, text, formats["words"])
    sheet.set_row(line, _height(told, WIDTHS[2:]))


def _height(texts: Sequence[str], widths: Sequence[int]) -> float:
    """Points a row needs so that no wrapped text is cut."""
    lines = [math.ceil(len(text) * 1.1 / width) for text, width in zip(texts, widths, strict=True)]
    return 15.0 * max(1, *lines)


def _cell(sheet: Any, line: int, column: int, value: object, style: Any) -> None:
    """A cell as it stands: numbers as numbers, all else as words."""
    if isinstance(value, bool) or value is None:
        sheet.write_string(line, column, "" if value is None else str(value).lower(), style)
    elif isinstance(value, int | float) and math.isfinite(value):
        sheet.write_number(line, column, value, style)
    elif isinstance(value, float):
        sheet.write_blank(line, column, None, style)
    elif isinstance(value, datetime | date):
        sheet.write_string(line, column, _day(value), style)
    else:
        sheet.write_string(line, column, str(value), style)


def _day(value: date) -> str:
    text = value.isoformat(sep=" ") if isinstance(value, datetime) else value.isoformat()
    return text.removesuffix(" 00:00:00")


def _loose(name: str) -> str:
    return str(name).strip().lower().replace(" ", "_")
