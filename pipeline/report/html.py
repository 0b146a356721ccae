"""Renderer of the report: one self-contained page that asks for nothing from anywhere."""

from __future__ import annotations

import base64
import re
from collections.abc import Iterable
from functools import cache
from html import escape

from jinja2 import Environment, PackageLoader, StrictUndefined, Template
from markupsafe import Markup

from pipeline.core.results import Results
from pipeline.report.comparison import comparison_table
from pipeline.report.content import report
from pipeline.report.days import redated
from pipeline.report.document import (
    SHORTENED,
    Cell,
    Document,
    Figure,
    Interval,
    Number,
    Paragraph,
    Quote,
    Reference,
    Section,
    Table,
    Text,
)
from pipeline.report.figures import csv, svg
from pipeline.report.finding import finding_text
from pipeline.report.house import styled
from pipeline.report.logo import address, placed
from pipeline.report.material import Material
from pipeline.report.numerals import clean, lines, slug

_MOMENT = re.compile(r"\d{4}-\d\d-\d\d \d\d:\d\d")
ROOT = '<svg xmlns="http://www.w3.org/2000/svg"'
_ROOT = re.compile(r'^.*?<svg [^>]*?viewBox="([^"]+)"', re.DOTALL)


def render(results: Results) -> dict[str, bytes]:
    """``report.html``."""
    return {"report.html": page(report(results)).encode()}


def page(document: Document) -> str:
    """The document as well-formed HTML, style and pictures inside.

    Words are escaped; the page's own policy forbids scripts and requests.
    """
    return _template("page.html.j2").render(document=document) + "\n"


def fragment(results: Results) -> str:
    """What a notebook shows of a run: the finding and the comparison table, escaped, no script."""
    material = Material.of(results)
    made = (comparison_table(material, full=False),) if results.columns else ()
    facts = material.study
    document = styled(Document(facts.title, "", (Section("", made),), facts.house))
    table = next(iter(document.tables), None)
    said = redated(finding_text(results), facts.house.dates)
    return _template("notebook.html.j2").render(title=facts.title, finding=said, table=table)


@cache
def _template(name: str) -> Template:
    environment = Environment(
        loader=PackageLoader("pipeline.report", ""),
        autoescape=True,
        trim_blocks=True,
        lstrip_blocks=True,
        undefined=StrictUndefined,
    )
    environment.filters |= {
        "kind": lambda value: type(value).__name__.lower(),
        "clean": clean,
        "slug": slug,
        "lines": lines,
        "picture": picture,
        "source": source,
        "sources": sources,
        "drawn": drawn,
        "numeric": numeric,
        "address": address,
        "placed": placed,
        "anchor": anchor,
        "column_class": column_class,
    }
    css = environment.loader.get_source(environment, "page.css")[0] if environment.loader else ""
    environment.globals["shortened"] = SHORTENED
    environment.globals["css"] = Markup(css)
    return environment.get_template(name)


def numeric(cell: Cell) -> bool:
    """Whether a cell's content, a number or a date, stays on one line."""
    worded = isinstance(cell, Text) and not _MOMENT.fullmatch(cell.text)
    worded = worded or (isinstance(cell, Interval) and bool(cell.words))
    return cell is not None and not worded


def anchor(reference: Reference, document: Document) -> str:
    """Where a reference leads: the id of its table or figure."""
    kind = document.numbers.get(reference.name, "").partition(" ")[0].lower()
    return f"{kind}-{slug(reference.name)}"


def column_class(table: Table, at: int) -> str:
    """What a column holds: plain numbers, sentences, or other."""
    cells = [row[at] for row in table.rows if row[at] is not None]
    if table.columns[at].prose:
        return "prose"
    if at and cells and all(isinstance(cell, Number) for cell in cells):
        return "figures"
    return "words"


def source(quote: Quote) -> str:
    """Where a quoted number stands, for the person who points at it."""
    where = clean(", ".join(f"{name} {value}" for name, value in quote.where))
    return f"data/{quote.table}.parquet: {quote.column} where {where}"


def sources(paragraphs: Iterable[Paragraph]) -> tuple[str, ...]:
    """For the margin: the tables that the quoted numbers stand in, and which numbers of each."""
    found: dict[str, dict[str, None]] = {}
    for quote in (quote for paragraph in paragraphs for quote in paragraph.quotes):
        named = dict(quote.where).get("name", quote.column)
        found.setdefault(quote.table, {})[clean(str(named)).replace("_", " ")] = None
    return tuple(f"data/{table}: {', '.join(names)}" for table, names in found.items())


def drawn(figure: Figure) -> Markup:
    """The numbers behind a figure as a link that holds them itself."""
    content = base64.b64encode(csv(figure.data)).decode()
    return Markup("data:text/csv;charset=utf-8;base64,{}").format(content)


def picture(figure: Figure) -> Markup:
    """The figure's SVG to stand inside a page: without prologue and size, named for readers."""
    label = escape(clean(figure.alt))

    def opening(root: re.Match[str]) -> str:
        return f'{ROOT} viewBox="{root.group(1)}" role="img" aria-label="{label}"'

    return Markup(_ROOT.sub(opening, svg(figure), count=1))
