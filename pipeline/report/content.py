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
from pipeline.report.graphs import columns_figure, distribution_figure, path_figure
from pipeline.report.horizons import horizons_section
from pipeline.report.material import Material, prose
from pipeline.report.overturn import overturn_section, survival_section
from pipeline.report.reaction import reaction_section, windows_table
from pipeline.report.ready import outcome_section, summary_table
from pipeline.report.sample import attrition_section, question_section
from pipeline.report.selection import selection_section
from pipeline.report.stages import identification_section
from pipeline.report.timing import timing_section


@lru_cache(maxsize=1)
def report(results: Results) -> Document:
    """The full report of a run; built once for all formats."""
    material = Material.of(results)
    sections = (
        finding_section(material),
        question_section(material),
        attrition_section(material),
        timing_section(material),
        outcome_section(material) if material.ready else reaction_section(material),
        horizons_section(material),
        comparison_section(material),
        identification_section(material) if results.columns else None,
        selection_section(material),
        size_section(material),
        diagnostics_section(material),
        overturn_section(material),
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
    figure = distribution_figure(material) if material.ready else path_figure(material)
    mean = summary_table if material.ready else windows_table
    table = comparison_table(material, full=False) if results.columns else mean(material)
    read: tuple[Block, ...] = (reading(material, notes=False),) if results.columns else ()
    side = Section("Side by side", (table,), wide=True) if results.columns else None
    sections = (
        Section(finding.heading, (question, *finding.blocks)),
        Section(_figure_heading(material), (figure,)) if figure else None,
        side or Section("The mean" if material.ready else "By window", (table,)),
        Section("How to read the columns", read) if read else None,
        survival_section(material),
        Section("Limits", (Bullets(limits(material)),)),
        cautions_section(material),
    )
    study = material.study
    kept = tuple(section for section in sections if section is not None)
    return Document(study.title, "Memo to the investment committee", kept)


def _figure_heading(material: Material) -> str:
    if material.ready:
        return f"The {material.outcome} over deals"
    return "The reaction session by session"


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
