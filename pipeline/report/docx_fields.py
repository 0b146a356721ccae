"""Fields of a Word file: numbers that the word processor keeps right when the text is edited."""

from __future__ import annotations

import re
from typing import Any

from docx.oxml import OxmlElement
from docx.oxml.ns import qn

from pipeline.report.document import Paragraph, Reference
from pipeline.report.numerals import clean


def add_field(holder: Any, code: str, shown: str) -> tuple[Any, Any]:
    """A field with this code that shows ``shown`` until it is brought up to date.

    Returns:
        Its first and its last run.
    """
    parts = []
    for kind in ("begin", "code", "separate", "shown", "end"):
        run = holder.add_run()
        if kind == "code":
            element = OxmlElement("w:instrText")
            element.set(qn("xml:space"), "preserve")
            element.text = f" {code} "
            run._r.append(element)
        elif kind == "shown":
            run.add_text(shown)
        else:
            element = OxmlElement("w:fldChar")
            element.set(qn("w:fldCharType"), kind)
            run._r.append(element)
        parts.append(run)
    return parts[0], parts[-1]


def add_number(holder: Any, name: str, called: str, mark: int) -> None:
    """``Table 2. `` before a caption: the number is a field, the whole a target of references."""
    word, _, number = called.partition(" ")
    first = holder.add_run(f"{word} ")
    _, last = add_field(holder, f"SEQ {word} \\* ARABIC", number)
    start, end = OxmlElement("w:bookmarkStart"), OxmlElement("w:bookmarkEnd")
    for element in (start, end):
        element.set(qn("w:id"), str(mark))
    start.set(qn("w:name"), target(name))
    first._r.addprevious(start)
    last._r.addnext(end)
    holder.add_run(". ")


def target(name: str) -> str:
    """The hidden bookmark of a table or figure: at most 40 letters, digits and underscores."""
    return "_Ref_" + re.sub(r"\W", "_", name)[:35]


def runs(holder: Any, paragraph: Paragraph) -> Any:
    """Fill a Word paragraph with a paragraph's pieces; the run-in heading in bold."""
    if paragraph.lead:
        holder.add_run(f"{clean(paragraph.lead)} ").bold = True
    for piece in paragraph.pieces:
        if isinstance(piece, Reference):
            add_field(holder, f"REF {target(piece.name)} \\h", piece.text)
        else:
            holder.add_run(clean(piece if isinstance(piece, str) else piece.text))
    return holder


def page_numbers(holder: Any) -> None:
    """``Page 1 of 1``, both numbers fields."""
    holder.add_run("Page ")
    add_field(holder, "PAGE", "1")
    holder.add_run(" of ")
    add_field(holder, "NUMPAGES", "1")
