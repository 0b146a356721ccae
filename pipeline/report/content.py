"""The full report of a run."""

from __future__ import annotations

from functools import lru_cache

from pipeline.core.results import Results
from pipeline.report.closing import appendix, cautions_section
from pipeline.report.comparison import comparison_table, reading
from pipeline.report.document import Block, Document, Section
from pipeline.report.doubts import (
    diagnostics_section,
    limits_section,
    sensitivity_section,
    size_section,
)
from pipeline.report.finding import finding_section
from pipeline.report.graphs import columns_figure
from pipeline.report.horizons import horizons_section
from pipeline.report.house import styled
from pipeline.report.material import Material, prose
from pipeline.report.overturn import overturn_section
from pipeline.report.reaction import reaction_section
from pipeline.report.ready import outcome_section
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
    return styled(Document(study.title, study.question, kept, study.house))


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
