"""What a sheet hides from whoever reads its cells one by one: merged cells, hidden rows, sheets."""

from __future__ import annotations

import re
from xml.etree import ElementTree
from zipfile import BadZipFile, ZipFile

from pipeline.core.findings import Finding, Severity
from pipeline.inputs.source import Source

MERGED = re.compile(rb'<mergeCell\s+ref="([A-Z]+)(\d+):([A-Z]+)(\d+)"')
ROWS = re.compile(rb"<row\s[^>]*>")
NUMBER = re.compile(rb'\sr="(\d+)"')
HIDDEN = re.compile(rb'\shidden="(?:1|true)"')
FILLED = re.compile(rb"<(?:v|is)>|<v\s")
MAIN = "{http://schemas.openxmlformats.org/spreadsheetml/2006/main}"
LINK = "{http://schemas.openxmlformats.org/officeDocument/2006/relationships}id"
LARGEST = 1 << 27
EXAMPLES = 3


def sheet_findings(source: Source) -> list[Finding]:
    """Errors for merged cells and hidden rows of the sheet read, a warning for further sheets.

    Other files, and sheets of more than 128 MB, give none.
    """
    if source.kind != ".xlsx":
        return []
    try:
        with ZipFile(source.at) as archive:
            parts = _parts(archive)
            name = source.sheet or next(iter(parts))
            if archive.getinfo(parts[name]).file_size > LARGEST:
                return []
            found = _of_cells(archive.read(parts[name]), source)
            others = [other for other in parts if other != name and _filled(archive, parts[other])]
    except (BadZipFile, KeyError, OSError, ElementTree.ParseError, StopIteration):
        return []  # what is wrong with the file is said where it is read
    return found + ([_several(source, name, others)] if others and not source.sheet else [])


def _parts(archive: ZipFile) -> dict[str, str]:
    """Sheet -> its part of the archive, in the order of the workbook."""
    links = ElementTree.fromstring(archive.read("xl/_rels/workbook.xml.rels"))
    places = {item.get("Id"): item.get("Target", "") for item in links}
    book = ElementTree.fromstring(archive.read("xl/workbook.xml"))
    sheets = ((item.get("name", ""), places[item.get(LINK)]) for item in book.iter(f"{MAIN}sheet"))
    return {
        name: place.lstrip("/") if place.startswith("/") else f"xl/{place}"
        for name, place in sheets
    }


def _filled(archive: ZipFile, part: str) -> bool:
    """Whether a sheet holds cells; one too large to look at does."""
    return archive.getinfo(part).file_size > LARGEST or bool(FILLED.search(archive.read(part)))


def _of_cells(sheet: bytes, source: Source) -> list[Finding]:
    found = []
    merged = [
        (f"{a.decode()}{int(top)}:{b.decode()}{int(bottom)}", int(top))
        for a, top, b, bottom in MERGED.findall(sheet)
        if int(bottom) >= source.header_row
    ]
    if merged:
        areas = ", ".join(area for area, _ in merged[:EXAMPLES])
        more = f" and {len(merged) - EXAMPLES} more" if len(merged) > EXAMPLES else ""
        found.append(
            Finding(
                "merged_cells",
                Severity.ERROR,
                source.file,
                got=f"merged cells {areas}{more}",
                expected="a value in each cell: of merged cells only the first holds one",
                remedy="Part the cells and fill each, or name the row of headings in "
                f"inputs.source.{source.table}.header_row.",
                rows=tuple(top for _, top in merged),
            )
        )
    hidden = _hidden(sheet, source.header_row)
    if hidden:
        found.append(
            Finding(
                "hidden_rows",
                Severity.ERROR,
                source.file,
                got=f"{len(hidden)} hidden rows",
                expected="every row in sight: nothing says whether hidden ones belong to the table",
                remedy="Show the rows, or delete them; take any filter off.",
                rows=hidden,
            )
        )
    return found


def _hidden(sheet: bytes, header_row: int) -> tuple[int, ...]:
    tags = (tag for tag in ROWS.findall(sheet) if HIDDEN.search(tag))
    numbers = (NUMBER.search(tag) for tag in tags)
    rows = (int(number.group(1)) for number in numbers if number)
    return tuple(row for row in rows if row >= header_row)


def _several(source: Source, name: str, others: list[str]) -> Finding:
    return Finding(
        "several_sheets",
        Severity.WARNING,
        source.file,
        got=f"further sheets: {', '.join(others[:EXAMPLES])}",
        expected="a study that says which sheet is the table",
        remedy=f"The first, '{name}', is read: write [inputs.sheets] {source.table} = '{name}' if "
        "that is right.",
    )
