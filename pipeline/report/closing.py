"""Cautions, sign-off, and the appendix: variables, sources, ledger and findings."""

from __future__ import annotations

from itertools import islice

import pandas as pd

from pipeline.core.estimate import Estimate, TestResult
from pipeline.core.house import House
from pipeline.core.rules import rule_title
from pipeline.report.document import (
    Bullets,
    Callout,
    Cell,
    Column,
    Row,
    Section,
    Table,
    Text,
)
from pipeline.report.horizons import horizon_sources
from pipeline.report.material import MOST_ROWS, Material, capital, prose, rows_left_out, taken
from pipeline.report.numerals import plain, true_minus
from pipeline.report.reaction import other_models_section
from pipeline.report.wording import axis_words, joined, spoken

LEDGER_SHOWN = 40
FACTS_SHOWN = 40

CAUTIONS = (
    ("Research, not advice.", "This is a study of past announcements. It recommends no trade and "
     "offers nothing for sale."),
    ("The past.", "Averages of past announcements do not predict the next one."),
    ("Costs.", "Estimates are gross of costs, taxes and price impact, and could not have been "
     "traded at the closing prices used."),
    ("Public information only.", "Inputs must be public information. Before circulating, confirm "
     "that they are, and check the restricted list."),
    ("Who decides.", "Local securities law, the house's own compliance and its licensed advisers "
     "decide what may be done with this document. Where they say otherwise, they are right."),
)  # fmt: skip


READY_CAUTIONS = (
    ("Research, not advice.", "This is a study of past deals. It recommends no trade and offers "
     "nothing for sale."),
    ("The past.", "Averages of past deals do not predict the next one."),
    ("Where the outcome comes from.", "It was computed elsewhere and taken over unchecked. Whoever "
     "uses a number of this report should know how it was made."),
    *CAUTIONS[-2:],
)  # fmt: skip


def cautions_section(material: Material) -> Section:
    """The cautions and the lines to sign."""
    texts = READY_CAUTIONS if material.ready else CAUTIONS
    paragraphs = tuple(prose(text, lead=lead) for lead, text in texts)
    return Section(
        "Cautions", (Callout("Read before use", paragraphs), sign_off_table(material.house))
    )


def sign_off_table(house: House) -> Table:
    """Lines to be filled in by hand, one for every reviewer whom the house names."""
    columns = tuple(Column(title) for title in ("", "Name", "Date", "Signature"))
    named = [(person.role, person.name) for person in house.reviewers]
    lines = [("Distribution class", ""), ("Prepared by", ""), *(named or [("Reviewed by", "")]),
             ("Released by compliance", "")]  # fmt: skip
    rows = tuple((Text(role), Text(name) if name else None, None, None) for role, name in lines)
    return Table("sign_off", prose("Distribution and review"), columns, rows, form=True)


def appendix(material: Material) -> tuple[Section, ...]:
    """Variables, sources, ledger and findings."""
    ledger, findings = ledger_table(material), findings_table(material)
    facts, variables = fit_facts_table(material), variables_table(material)
    sources = Bullets(tuple(prose(taken(text, "source")) for text in citations(material)))
    parts = [
        None if material.ready else other_models_section(material),
        Section("Variables", (variables,), 3) if variables.rows else None,
        Section("Sources of the formulas", (sources,), 3) if sources.items else None,
        Section("Facts of each fit", (facts,), 3) if facts.rows else None,
        Section("Ledger", (ledger,), 3) if ledger.rows else None,
        Section("Findings of the input checks", (findings,), 3) if findings.rows else None,
    ]
    opening = Section("Appendix", ())
    return (opening, *(part for part in parts if part is not None))


def fit_facts_table(material: Material) -> Table:
    """One row a fact of a column's or a stage's fit."""
    columns = (Column("Column"), Column("Stage"), Column("Fact"), Column("Value"))
    rows = tuple(
        (Text(e.title), Text(stage.title if stage is not e else ""), Text(_fact_title(material, k)),
         plain(float(value)))
        for e in material.estimates
        for stage in (e, *e.stages)
        for k, value in stage.fit.items()
    )  # fmt: skip
    notes = (prose("Effects among them are decimal."),)
    title = prose("As the estimator gave them")
    return Table("fit_facts", title, columns, rows, notes, shown=FACTS_SHOWN)


def _fact_title(material: Material, key: str) -> str:
    stem, _, name = key.partition(".")
    for cluster in material.study.clusters:
        stem = stem.replace(f"_{cluster}_", f"_{material.study.words(cluster)}_")
    return f"{spoken(stem)}: {material.study.words(name)}" if name else spoken(stem)


def variables_table(material: Material) -> Table:
    """Each variable's name, role and values over the deals kept."""
    columns = (
        Column("Variable"), Column("Name in the data"), Column("Role", prose=True),
        Column("Mean"), Column("Standard deviation"), Column("Least"), Column("Greatest"),
        Column("Missing", "deals"),
    )  # fmt: skip
    rows = tuple(_variable_row(material, name, role) for name, role in _roles(material).items())
    note = prose("Moments are over the deals kept. Blank: not a number, or not in the table of "
                 "deals.")  # fmt: skip
    return Table("variables", prose("Roles and values"), columns, rows, (note,))


def _roles(material: Material) -> dict[str, str]:
    study = material.study
    controls = [name for name in study.regressors if name != study.treatment]
    uses = (
        ("the feature asked about", (study.treatment,)), ("control", controls),
        ("fixed effect", study.effects), ("cluster", study.clusters),
        ("instrument", study.instruments), ("decision to announce", study.selection),
        ("decision to announce alone", study.excluded),
    )  # fmt: skip
    found: dict[str, list[str]] = {}
    for role, names in uses:
        for name in names:
            if name:
                found.setdefault(name, []).append(role)
    base = study.outcome.base
    if base in material.results.deals:
        found.setdefault(base, []).append("scale of the money figures")
    if material.ready:
        found = {study.outcome.column: ["outcome"], **found}
    return {name: joined(roles) for name, roles in found.items()}


def _variable_row(material: Material, name: str, role: str) -> Row:
    outcome, unit = material.study.outcome, material.unit
    if name == outcome.column:
        start = (Text(axis_words(outcome.words, unit.heading)), Text(name), Text(role))
        return (*start, *_moments(material.results.deals, name, unit.scale))
    start = (Text(capital(material.study.words(name))), Text(name), Text(role))
    if role in ("fixed effect", "cluster", "fixed effect and cluster"):
        return (*start, *(None,) * 5)  # the mean of a label means nothing
    return (*start, *_moments(material.results.deals, name))


def _moments(deals: pd.DataFrame, name: str, scale: float = 1.0) -> tuple[Cell, ...]:
    blank: tuple[Cell, ...] = (None,) * 5
    if name not in deals:
        return blank
    missing = plain(float(deals[name].isna().sum()), 0, "deals")
    if not pd.api.types.is_numeric_dtype(deals[name]):
        return (*blank[:4], missing)
    values = scale * deals[name].astype(float)
    return (*(plain(float(v)) for v in (values.mean(), values.std(), values.min(), values.max())),
            missing)  # fmt: skip


def citations(material: Material) -> tuple[str, ...]:
    """The published sources of what the run used, each once, in alphabetical order."""
    columns = [c for c in material.results.columns if isinstance(c, Estimate)]
    estimates = [*columns, *(stage for column in columns for stage in column.stages)]
    tests = [t for entry in material.results.window_tests for t in entry.tests.values()]
    tests += [t for e in estimates for t in e.tests.values()]
    found = [e.citation for e in estimates]
    found += [t.citation for t in tests if isinstance(t, TestResult)]
    if "source" in material.results.diagnostics:
        found += [str(s) for s in material.results.diagnostics["source"].dropna()]
    found += horizon_sources(material)
    named = {text.strip() for text in found if text.strip()}
    return tuple(sorted(text for text in named if "no source" not in text))


def ledger_table(material: Material) -> Table:
    """One row an entry; a page shows the first, the workbook all."""
    columns = (
        Column("Stage"), Column("Deal"), Column("Rule", prose=True), Column("What was done"),
        Column("Value"), Column("Threshold"),
    )  # fmt: skip
    rows = tuple(
        (
            Text(spoken(stage)), Text(e.deal), Text(rule_title(e.rule)), Text(str(e.action)),
            Text(true_minus(e.value)), Text(true_minus(e.threshold)),
        )
        for stage, e in islice(material.results.ledger, MOST_ROWS)
    )  # fmt: skip
    title = prose("Every deal dropped, changed or flagged")
    notes = rows_left_out(sum(1 for _ in material.results.ledger), "ledger")
    return Table("ledger", title, columns, rows, notes, shown=LEDGER_SHOWN)


def findings_table(material: Material) -> Table:
    """One row a finding of the input checks."""
    columns = (
        Column("Severity"), Column("Rule", prose=True), Column("Where", prose=True),
        Column("Found", prose=True), Column("Expected", prose=True), Column("Remedy", prose=True),
    )  # fmt: skip
    rows = tuple(
        (
            Text(str(f.severity)), Text(rule_title(f.rule)), Text(f.where), Text(f.got),
            Text(f.expected), Text(f.remedy),
        )
        for f in material.results.findings
    )  # fmt: skip
    return Table("findings", prose("What the checks found"), columns, rows)
