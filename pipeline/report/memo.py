"""The committee's memo: the finding, one figure, one table, limits and cautions; then an appendix.

Built from the same parts as the full report.
"""

from __future__ import annotations

from collections.abc import Iterator
from functools import lru_cache

from pipeline.core.estimate import Column as Estimated
from pipeline.core.estimate import Withheld
from pipeline.core.results import Results
from pipeline.report.closing import cautions_section
from pipeline.report.comparison import cell_notes, comparison_table, lead_cell, reading
from pipeline.report.document import (
    Bullets,
    Column,
    Document,
    Figure,
    Paragraph,
    Reference,
    Row,
    Section,
    Table,
    Text,
    Verbatim,
)
from pipeline.report.doubts import limits
from pipeline.report.finding import finding_section
from pipeline.report.graphs import distribution_figure, path_figure
from pipeline.report.house import styled
from pipeline.report.material import Material, capital, prose
from pipeline.report.numerals import count, true_minus
from pipeline.report.overturn import survival_section
from pipeline.report.reaction import windows_table
from pipeline.report.ready import summary_table
from pipeline.report.sample import settings_table
from pipeline.report.wording import bracket_words, per_unit

SUBTITLE = "Memo to the investment committee"
GLANCE = "answers"


@lru_cache(maxsize=1)
def memo(results: Results) -> Document:
    """The memo of a run, its tables and figures numbered; built once for all formats."""
    material = Material.of(results)
    study = material.study
    sections = (*_body(material), *_appendix(material))
    return styled(Document(study.title, SUBTITLE, sections, study.house, numbered=True))


def _body(material: Material) -> Iterator[Section]:
    finding = finding_section(material)
    question = Paragraph((Verbatim(material.study.question, "study"),), quotation=True)
    figure, table = _figure(material), _table(material)
    yield Section(finding.heading, (question, *finding.blocks, _where(material, figure, table)))
    if figure:
        yield Section(_figure_heading(material), (figure,))
    yield Section(_table_heading(material), (table,))
    survival = survival_section(material)
    if survival:
        yield survival
    yield Section("Limits", (Bullets(limits(material)),))
    yield cautions_section(material)


def _appendix(material: Material) -> Iterator[Section]:
    """What stands behind the memo: the settings, and the columns with every variable."""
    yield Section("Appendix", (settings_table(material),), fresh=True)
    if material.results.columns:
        yield Section("How to read the columns", (reading(material, notes=False),), 3)
        yield Section("Side by side", (comparison_table(material),), 3, wide=True)


def _where(material: Material, figure: Figure | None, table: Table) -> Paragraph:
    """Where the reader finds what the finding speaks of."""
    drawn = (Reference(figure.name), " draws it; ") if figure else ()
    behind = (
        (
            " every variable of the columns stands in ",
            Reference("comparison"),
            ", the settings in ",
            Reference("settings"),
            ".",
        )
        if material.results.columns
        else (" the settings stand in ", Reference("settings"), ".")
    )
    return prose(drawn, Reference(table.name), " holds the numbers;", behind,
                 lead="Where it stands.")  # fmt: skip


def _figure(material: Material) -> Figure | None:
    return distribution_figure(material) if material.ready else path_figure(material)


def _figure_heading(material: Material) -> str:
    if material.ready:
        return f"The {material.outcome} over deals"
    return "The reaction session by session"


def _table(material: Material) -> Table:
    if material.results.columns:
        return glance_table(material)
    return summary_table(material) if material.ready else windows_table(material)


def _table_heading(material: Material) -> str:
    if material.results.columns:
        return "The answers side by side"
    return "The mean" if material.ready else "By window"


def glance_table(material: Material) -> Table:
    """One row a column of the comparison: the feature's effect and what it is."""
    below = bracket_words(material.house, material.study.level)
    columns = (
        Column("Column"), Column(f"Effect with {below}", per_unit(material.unit)), Column("Deals"),
        Column("What it estimates", prose=True),
    )  # fmt: skip
    rows = tuple(_glance_row(material, column) for column in material.results.columns)
    title = prose(f"The effect of {material.feature}, column by column")
    return Table(GLANCE, title, columns, rows, cell_notes(material))


def _glance_row(material: Material, column: Estimated) -> Row:
    title = Text(true_minus(column.title))
    if isinstance(column, Withheld):
        return (title, None, None, Text(f"No number: {material.in_words(column.reason)}"))
    estimand = capital(material.in_words(column.estimand))
    return (title, lead_cell(material, column), count(column.n), Text(estimand))
