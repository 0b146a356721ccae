"""The documents: the full report and the memo, built from the same parts."""

from __future__ import annotations

from functools import lru_cache

from pipeline.core.results import Results
from pipeline.report.closing import appendix, cautions_section
from pipeline.report.comparison import comparison_table, reading
from pipeline.report.document import Block, Bullets, Document, Paragraph, Section, Verbatim
from pipeline.report.doubts import (
    diagnostics_section,
    limits,
    limits_section,
    sensitivity_section,
    size_section,
)
from pipeline.report.finding import finding_section
from pipeline.report.graphs import columns_figure, path_figure
from pipeline.report.material import Material, prose
from pipeline.report.reaction import reaction_section, windows_table
from pipeline.report.sample import attrition_section, question_section
from pipeline.report.stages import identification_section


@lru_cache(maxsize=1)
def report(results: Results) -> Document:
    """The full report of a run; built once for all formats."""
    material = Material.of(results)
    sections = (
        finding_section(material),
        question_section(material),
        attrition_section(material),
        reaction_section(material),
        comparison_section(material),
        identification_section(material) if results.columns else None,
        size_section(material),
        diagnostics_section(material),
        sensitivity_section(material),
        limits_section(material),
        cautions_section(material),
        *appendix(material),
    )
    study = material.study
    kept = tuple(section for section in sections if section is not None)
    return Document(study.title, study.question, kept)


def memo(results: Results) -> Document:
    """The memo: the finding and one figure, one table, limits and cautions."""
    material = Material.of(results)
    finding = finding_section(material)
    question = Paragraph((Verbatim(material.study.question, "study"),), quotation=True)
    figure = path_figure(material)
    table = comparison_table(material, full=False) if results.columns else windows_table(material)
    read: tuple[Block, ...] = (reading(material, notes=False),) if results.columns else ()
    side = Section("Side by side", (table,), wide=True) if results.columns else None
    sections = (
        Section(finding.heading, (question, *finding.blocks)),
        Section("The reaction session by session", (figure,)) if figure else None,
        side or Section("By window", (table,)),
        Section("How to read the columns", read) if read else None,
        Section("Limits", (Bullets(limits(material)),)),
        cautions_section(material),
    )
    study = material.study
    kept = tuple(section for section in sections if section is not None)
    return Document(study.title, "Memo to the investment committee", kept)


def comparison_section(material: Material) -> Section | None:
    """The estimators side by side with how to read them; None if the study asks for none."""
    if not material.results.columns:
        return None
    how = prose(
        "The columns put the same question to the same deals in different ways. They agree only "
        "as far as what they estimate agrees: read that row before comparing two numbers.",
        lead="How to read it.",
    )  # fmt: skip
    figure = columns_figure(material)
    blocks: tuple[Block, ...] = (how, comparison_table(material))
    if figure is not None:
        blocks = (*blocks, figure)
    return Section("The feature, side by side", (*blocks, reading(material)))
