"""Make again the snapshots of the document in :mod:`tests.report.kitchen`, one a format.

Run from the project's root after a change of a renderer, and read the difference before keeping it:

    .venv/bin/python -m tests.report.refresh_snapshots
"""

from __future__ import annotations

import io
import re
import zipfile
from collections.abc import Iterator
from pathlib import Path

import openpyxl
from lxml import etree
from pypdf import PdfReader
from pypdf.generic import Destination

from pipeline.report import docx, html, pdf, tex, xlsx
from pipeline.report.document import Document
from tests.report.kitchen import kitchen

SNAPSHOTS = Path(__file__).with_name("snapshots")


def made() -> dict[str, str]:
    """File name -> what the renderer makes of the document now."""
    document = kitchen()
    tables = (table for table in document.tables if not table.form)
    return {
        "kitchen.html": page(document),
        "kitchen.docx.xml": word(document),
        "kitchen.xlsx.txt": "".join(workbook(document)),
        "kitchen.tex": "\n".join(tex.tabular(table, document.house.footer) for table in tables),
        "kitchen.pdf.txt": "".join(paper(document)),
    }


def page(document: Document) -> str:
    """The page without its style and the strokes of its drawings, which have tests of their own."""
    text = html.page(document)
    text = re.sub(r"<style>.*?</style>", "<style></style>", text, flags=re.DOTALL)
    text = re.sub(r"(<svg [^>]*?)viewBox=\"[^\"]*\"([^>]*>).*?</svg>", r"\1\2</svg>", text,
                  flags=re.DOTALL)  # fmt: skip
    return re.sub(r"base64,[A-Za-z0-9+/=]+", "base64,", text)


def word(document: Document) -> str:
    """The main part of the Word file, one element a line."""
    with zipfile.ZipFile(io.BytesIO(docx.file(document))) as package:
        tree = etree.fromstring(package.read("word/document.xml"))
    etree.indent(tree)
    return etree.tostring(tree, encoding="unicode") + "\n"


def workbook(document: Document) -> Iterator[str]:
    """Every cell that holds something: where, what kind, what, and how it is shown."""
    book = openpyxl.load_workbook(io.BytesIO(xlsx.workbook(document)))
    for sheet in book:
        yield f"== {sheet.title} | {sheet.oddFooter.left.text} | paper {sheet.page_setup.paperSize}"
        yield f" | merged {sorted(str(span) for span in sheet.merged_cells.ranges)}\n"
        for row in sheet.iter_rows():
            for cell in row:
                if cell.value is not None:
                    kind = f"{cell.data_type} {cell.number_format}"
                    yield f"{cell.coordinate} [{kind}] {cell.value!r}\n"


def paper(document: Document) -> Iterator[str]:
    """The PDF's bookmarks, then the words of every page as they are read."""
    reader = PdfReader(io.BytesIO(pdf.file(document)))
    yield from _bookmarks(reader, reader.outline, 0)
    for at, leaf in enumerate(reader.pages, 1):
        width, height = (round(float(side)) for side in leaf.mediabox[2:])
        yield f"== page {at}, {width} by {height}\n{leaf.extract_text()}\n"


def _bookmarks(reader: PdfReader, entries: list[object], depth: int) -> Iterator[str]:
    for entry in entries:
        if isinstance(entry, list):
            yield from _bookmarks(reader, entry, depth + 1)
        elif isinstance(entry, Destination):
            number = reader.get_destination_page_number(entry)
            yield f"{'  ' * depth}{entry.title} -> {number + 1 if number is not None else '?'}\n"


def main() -> None:
    """Write every snapshot."""
    SNAPSHOTS.mkdir(exist_ok=True)
    for name, text in made().items():
        (SNAPSHOTS / name).write_text(text, encoding="utf-8", newline="\n")


if __name__ == "__main__":
    main()
