"""Parts of a Word file: runs, borders, captions, tables."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from docx.enum.style import WD_STYLE_TYPE
from docx.enum.table import WD_TABLE_ALIGNMENT
from docx.enum.text import WD_ALIGN_PARAGRAPH
from docx.oxml import OxmlElement
from docx.oxml.ns import qn
from docx.shared import Emu, Pt

from pipeline.report.document import NOTHING, SHORTENED, Figure, Table
from pipeline.report.docx_fields import add_number, runs
from pipeline.report.numerals import clean, lines

TABLE_LOOK = "Three Rules"
TABLE_STYLES = {"Table Text": 8.5, "Table Small": 7.5}
RULE = {"val": "single", "sz": "8", "space": "1", "color": "23211E"}
LIGHT = {"val": "single", "sz": "12", "space": "8", "color": "C9C2B6"}


def set_font(style: Any, name: str, size: float) -> None:
    """A style's font in every script, and its size in points."""
    style.font.name, style.font.size = name, Pt(size)
    fonts = style.element.get_or_add_rPr().get_or_add_rFonts()
    for theme in ("asciiTheme", "hAnsiTheme", "eastAsiaTheme", "cstheme"):
        fonts.attrib.pop(qn(f"w:{theme}"), None)
    for script in ("ascii", "hAnsi", "eastAsia", "cs"):
        fonts.set(qn(f"w:{script}"), name)


def keep_with_next(paragraph: Any) -> None:
    """Keep a paragraph on the page of the one after it."""
    paragraph.paragraph_format.keep_with_next = True


def caption(word: Any, block: Table | Figure, numbers: Mapping[str, str]) -> None:
    """The title above a table or a figure, with its number where the document gives one."""
    holder = word.add_paragraph(style="Caption")
    if block.name in numbers:
        mark = list(numbers).index(block.name) + 1
        add_number(holder, block.name, numbers[block.name], mark)
    runs(holder, block.title)
    keep_with_next(holder)


def border(properties: Any, side: str | None) -> None:
    """A light rule at one side of a paragraph; None takes every rule away."""
    for old in properties.findall(qn("w:pBdr")):
        properties.remove(old)
    if side is None:
        return
    borders = OxmlElement("w:pBdr")
    borders.append(_line(side, LIGHT))
    properties.insert_element_before(
        borders, "w:shd", "w:tabs", "w:suppressAutoHyphens", "w:kinsoku", "w:wordWrap",
        "w:overflowPunct", "w:topLinePunct", "w:autoSpaceDE", "w:autoSpaceDN", "w:bidi",
        "w:adjustRightInd", "w:snapToGrid", "w:spacing", "w:ind", "w:contextualSpacing",
        "w:mirrorIndents", "w:suppressOverlap", "w:jc", "w:textDirection", "w:textAlignment",
        "w:textboxTightWrap", "w:outlineLvl", "w:divId", "w:cnfStyle", "w:rPr", "w:sectPr",
        "w:pPrChange",
    )  # fmt: skip


def table_style(word: Any) -> None:
    """The style of all tables: a rule above, one below, one under the heading row."""
    style = word.styles.add_style(TABLE_LOOK, WD_STYLE_TYPE.TABLE)
    style.base_style = word.styles["Normal Table"]
    properties = OxmlElement("w:tblPr")
    borders = OxmlElement("w:tblBorders")
    for side in ("top", "bottom"):
        borders.append(_line(side, RULE))
    margins = OxmlElement("w:tblCellMar")
    for side in ("left", "right"):
        edge = OxmlElement(f"w:{side}")
        edge.set(qn("w:w"), "68")
        edge.set(qn("w:type"), "dxa")
        margins.append(edge)
    properties.extend((borders, margins))
    heading = OxmlElement("w:tblStylePr")
    heading.set(qn("w:type"), "firstRow")
    strong, cells, ruled = (OxmlElement(f"w:{n}") for n in ("rPr", "tcPr", "tcBorders"))
    strong.append(OxmlElement("w:b"))
    ruled.append(_line("bottom", RULE))
    cells.append(ruled)
    heading.extend((strong, cells))
    style.element.extend((properties, heading))


def add_table(word: Any, table: Table, width: int, numbers: Mapping[str, str]) -> None:
    """A table with three rules, its heading repeated on every page, its title above."""
    caption(word, table, numbers)
    if not table.rows:
        word.add_paragraph(NOTHING)
        return
    style = "Table Small" if len(table.columns) > 4 else "Table Text"
    rows = table.page_rows
    found = word.add_table(rows=1 + len(rows), cols=len(table.columns))
    found.alignment = WD_TABLE_ALIGNMENT.LEFT
    found.autofit = False
    found.style = TABLE_LOOK
    found._tbl.tblPr.find(qn("w:tblLook")).set(qn("w:firstColumn"), "0")
    widths = [Emu(w) for w in column_widths(table, width)]
    grid = zip(found.columns, widths, strict=True)
    for column, wide in grid:
        column.width = wide
    head: list[tuple[str, ...]] = [(clean(column.heading),) for column in table.columns]
    right = [table.numeric(at) for at in range(len(table.columns))]
    _fill(found.rows[0], head, widths, style, right, bold=True)
    found.rows[0]._tr.get_or_add_trPr().append(OxmlElement("w:tblHeader"))
    for at, (line, row) in enumerate(zip(found.rows[1:], rows, strict=True)):
        _fill(line, [lines(cell) for cell in row], widths, style, right, form=table.form)
        if at == table.footer:
            _rule(line, "top")
    _below(word, table)


def column_widths(table: Table, width: int) -> list[int]:
    """Widths that share ``width`` by what the columns hold, none narrower than the words need."""
    needs = [_need(table, at) for at in range(len(table.columns))]
    return [int(width * need / sum(needs)) for need in needs]


def _need(table: Table, at: int) -> float:
    cells = [row[at] for row in table.page_rows]
    longest = max((len(line) for cell in cells for line in lines(cell)), default=0)
    most = 60 if table.columns[at].prose else 26
    return float(min(max(longest, len(table.columns[at].heading) / 2, 8), most))


def _fill(
    row: Any, content: list[tuple[str, ...]], widths: list[Any], style: str,
    right: list[bool], *, bold: bool = False, form: bool = False,
) -> None:  # fmt: skip
    row._tr.get_or_add_trPr().append(OxmlElement("w:cantSplit"))
    for at, (texts, holder) in enumerate(zip(content, row.cells, strict=True)):
        holder.width = widths[at]
        paragraph = holder.paragraphs[0]
        paragraph.style = style
        if form:
            paragraph.paragraph_format.space_after = Pt(10)
            keep_with_next(paragraph)
        if right[at]:
            paragraph.alignment = WD_ALIGN_PARAGRAPH.RIGHT
        paragraph.add_run("\n".join(texts)).bold = bold or None
        if form and at:
            _edge(holder, "bottom")


def _below(word: Any, table: Table) -> None:
    for note in table.notes:
        paragraph = runs(word.add_paragraph(), note)
        paragraph.paragraph_format.space_after = Pt(2)
        for run in paragraph.runs:
            run.font.size = Pt(8)
    if table.shortened:
        word.add_paragraph().add_run(SHORTENED).font.size = Pt(8)
    if not table.notes:
        word.add_paragraph().paragraph_format.space_after = Pt(2)


def _line(side: str, look: dict[str, str]) -> Any:
    line = OxmlElement(f"w:{side}")
    for key, value in look.items():
        line.set(qn(f"w:{key}"), value)
    return line


def _rule(row: Any, side: str) -> None:
    for cell in row.cells:
        _edge(cell, side)


def _edge(cell: Any, side: str) -> None:
    properties = cell._tc.get_or_add_tcPr()
    borders = properties.find(qn("w:tcBorders"))
    if borders is None:
        borders = OxmlElement("w:tcBorders")
        properties.append(borders)
    borders.append(_line(side, RULE))
