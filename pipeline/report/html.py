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
from pipeline.report.deal_names import page_path
from pipeline.report.deal_pages import documents
from pipeline.report.document import (
    Document,
    Figure,
    Paragraph,
    Section,
)
from pipeline.report.figures import csv, svg
from pipeline.report.finding import finding_text
from pipeline.report.house import styled
from pipeline.report.logo import address, placed
from pipeline.report.material import Material
from pipeline.report.numerals import clean, lines, slug
from pipeline.report.table_markup import prose_markup, table_markup

ROOT = '<svg xmlns="http://www.w3.org/2000/svg"'
_ROOT = re.compile(r'^.*?<svg [^>]*?viewBox="([^"]+)"', re.DOTALL)


def render(results: Results) -> dict[str, bytes]:
    """``report.html``, and the pages of the deals beside it."""
    return {"report.html": page(report(results)).encode(), **deal_pages(results)}


def deal_pages(results: Results) -> dict[str, bytes]:
    """``deals/<name>.html`` of as many deals as the study asks for, and the list of all."""
    found = documents(results, results.study.deal_pages)
    return {page_path(name): page(document).encode() for name, document in found}


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
        "picture": picture,
        "pieces": lambda paragraph, numbers: Markup(prose_markup(paragraph, numbers)),
        "sources": sources,
        "drawn": drawn,
        "lines": lines,
        "table_markup": table_markup,
        "address": address,
        "placed": placed,
        "css_string": css_string,
    }
    css = environment.loader.get_source(environment, "page.css")[0] if environment.loader else ""
    environment.globals["css"] = Markup(css)
    return environment.get_template(name)


def css_string(text: str) -> Markup:
    """``text`` as a string of a style sheet: all but letters and digits by their numbers."""
    marks = (
        mark if mark.isalnum() and mark.isascii() else f"\\{ord(mark):x} " for mark in clean(text)
    )
    return Markup('"{}"').format(Markup("".join(marks)))


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
