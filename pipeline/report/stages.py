"""What stands behind the columns: the tests of each, first stages, and the argued part."""

from __future__ import annotations

from pipeline.core.estimate import Estimate, NotApplicable, TestResult
from pipeline.core.outcome import Unit
from pipeline.report.document import (
    Block,
    Cell,
    Column,
    Number,
    Paragraph,
    Row,
    Section,
    Table,
    Text,
    Verbatim,
)
from pipeline.report.material import Material, capital, prose, taken
from pipeline.report.numerals import (
    count,
    digits_for,
    in_unit,
    p_value,
    plain,
    shown,
    unit_digits,
)
from pipeline.report.sample_graphs import balance_figure, first_stage_figure, overlap_figure
from pipeline.report.wording import (
    CRITICAL_SIZE,
    bracket_words,
    coefficient_cell,
    df_words,
    distribution_words,
    per_unit,
    spoken,
)


def identification_section(material: Material) -> Section:
    """The analyst's arguments, then tests and first stages column by column."""
    blocks: list[Block] = []
    if material.study.rationales:
        blocks.append(prose("No test replaces these arguments. They are the analyst's, printed "
                            "as written."))  # fmt: skip
        blocks += [
            Paragraph((Verbatim(text, "study"),), lead=heading, quotation=True)
            for heading, text in material.study.rationales.items()
        ]
    else:
        blocks.append(prose("The study file holds no argument for how the effect is identified."))
    tests = column_tests_table(material)
    blocks += [tests] if tests.rows else []
    drawn = (first_stage_figure(material), overlap_figure(material), balance_figure(material))
    blocks += [figure for figure in drawn if figure is not None]
    for position, estimate in enumerate(material.results.columns):
        if isinstance(estimate, Estimate):
            blocks += [
                stage_table(material, estimate, stage, f"stage_{position + 1}_{at + 1}")
                for at, stage in enumerate(estimate.stages)
            ]
    return Section("First stages and identification", tuple(blocks))


def column_tests_table(material: Material) -> Table:
    """One row a test a column: null, statistic, distribution, p, caution, source."""
    columns = (
        Column("Column"), Column("Test"), Column("Null hypothesis", prose=True),
        Column("Statistic"), Column("Distribution"), Column("p"),
        Column("Caution", prose=True), Column("Source", prose=True),
    )  # fmt: skip
    named = [
        (parent.title if source is parent else f"{parent.title}: {source.title}", test)
        for parent in material.estimates
        for source in (parent, *parent.stages)
        for test in source.tests.values()
    ]
    rows = tuple(_test_row(material, title, test) for title, test in named)
    return Table("column_tests", prose("Tests of each column and its stages"), columns, rows)


def _fact_words(key: str) -> str:
    return spoken(key) if CRITICAL_SIZE.fullmatch(key) else key.replace("_", " ")


def _test_row(material: Material, title: str, test: TestResult | NotApplicable) -> Row:
    if isinstance(test, NotApplicable):
        reason = Text(material.in_words(f"no answer: {test.reason}"))
        return (Text(title), Text(test.name), None, None, None, None, reason, None)
    facts = "; ".join(f"{_fact_words(key)}: {_fact(v)}" for key, v in test.facts.items())
    caution = ". ".join(part.rstrip(".") for part in (test.caution, facts) if part)
    return (
        Text(title), Text(test.name), Text(material.in_words(test.null)),
        plain(test.statistic, 2), Text(distribution_words(test)), p_value(test.p_value),
        Text(material.in_words(caution)), Text(test.citation),
    )  # fmt: skip


def _fact(value: float) -> str:
    return shown(plain(float(value)))


def stage_table(material: Material, parent: Estimate, stage: Estimate, name: str) -> Table:
    """One stage's coefficients; in the outcome's unit where it explains what its column does."""
    same = stage.outcome == parent.outcome
    unit = material.unit if same else None
    heading = per_unit(unit) if unit else "per unit"
    below = bracket_words(material.house, stage.level)
    columns = (
        Column("Variable"), Column(f"Coefficient with {below}", heading),
        Column("Standard error", heading), Column("Statistic"), Column("p"),
    )  # fmt: skip
    rows = [_term_row(material, stage, term, unit) for term in stage.names]
    footer = _stage_footer(material, stage)
    title = prose(taken(f"{parent.title}: {stage.title}", "estimate"))
    notes = _stage_notes(material, stage)
    return Table(name, title, columns, (*rows, *footer), notes, footer=len(rows))


def _stage_footer(material: Material, stage: Estimate) -> list[Row]:
    facts: list[tuple[str, Cell]] = [("Rows (n)", count(stage.n, "rows"))]
    facts += [
        (f"Clusters: {material.study.words(name)}", count(number, "clusters"))
        for name, number in stage.clusters.items()
    ]
    facts.append(("Covariance", Text(material.in_words(stage.covariance_name))))
    facts.append(("Degrees of freedom", Text(df_words(stage.df))))
    return [(Text(title), cell, None, None, None) for title, cell in facts]


def _term_row(material: Material, stage: Estimate, name: str, unit: Unit | None) -> Row:
    term = {key: float(value) for key, value in stage.term(name).items()}
    error = term["std_error"]
    digits = unit_digits(error, unit) if unit else digits_for(error, 6)

    def shown_in(value: float) -> Number | None:
        return in_unit(value, unit, digits) if unit else plain(value, digits)

    return (
        Text(capital(material.study.words(name))),
        coefficient_cell(term, material.house, shown_in),
        shown_in(error),
        plain(term["statistic"], 2),
        p_value(term["p_value"]),
    )


def _stage_notes(material: Material, stage: Estimate) -> tuple[Paragraph, ...]:
    explained = prose("Explained: ", taken(material.in_words(stage.outcome), "estimate"), ".")
    facts = (stage.df_rule, *stage.notes)
    words = (capital(material.in_words(fact)).rstrip(".") for fact in facts if fact.strip())
    return (explained, *(prose(taken(f"{text}.", "estimate")) for text in words))
