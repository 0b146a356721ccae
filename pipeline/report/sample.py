"""What was asked of whom: the question, the population, the conventions, and who was lost."""

from __future__ import annotations

from collections import Counter

import pandas as pd

from pipeline.core.ledger import Action, StageLedger
from pipeline.core.rules import rule_title
from pipeline.report.document import (
    Bullets,
    Cell,
    Column,
    Paragraph,
    Piece,
    Row,
    Section,
    Table,
    Text,
    Verbatim,
)
from pipeline.report.material import Material, embedded, prose, taken
from pipeline.report.numerals import count
from pipeline.report.wording import joined, level_words, spoken, window_label


def question_section(material: Material) -> Section:
    """The question as the analyst wrote it, the study's settings and its conventions."""
    question = Paragraph((Verbatim(material.study.question, "study"),), quotation=True)
    notes = tuple(prose(taken(note, "study")) for note in material.study.notes)
    blocks = (population(material), settings_table(material))
    conventions = (Bullets(notes),) if notes else ()
    return Section("Question, population and conventions", (question, *blocks, *conventions))


def population(material: Material) -> Paragraph:
    """How many deals were read, tested and kept to the end."""
    read, kept = material.number("deals_read"), material.number("deals_kept")
    last: tuple[Piece, ...] = ()
    if material.results.columns:
        last = (" Deals in the regressions: ", kept, ".")
    with_outcome: tuple[Piece, ...] = (
        (". Deals with a ", embedded(material.outcome, "study"), ": ", material.summary("n"), ".")
        if material.ready
        else (". Deals in the tests of the headline window: ", material.event("n"), ".")
    )
    return prose(
        "Deals read: ", read, with_outcome, last,
        " Every deal that was dropped has a line in the ledger, with the rule and the value that "
        "decided.",
    )  # fmt: skip


def settings_table(material: Material) -> Table:
    """The settings of the study, one a row."""
    study = material.study
    rows = [
        *(_outcome_settings(material) if material.ready else _window_settings(material)),
        ("Deal feature asked about", material.feature),
        ("Its two values", joined(group for group in study.groups if group)),
        ("Controls", joined(study.words(n) for n in study.regressors if n != study.treatment)),
        ("Fixed effects", joined(study.words(n) for n in study.effects)),
        (
            "Errors clustered, where a column says so, by",
            joined(study.words(n) for n in study.clusters),
        ),
        ("Instruments", joined(study.words(n) for n in study.instruments)),
        ("Decision to announce explained by", joined(study.words(n) for n in study.selection)),
        ("In that decision alone", joined(study.words(n) for n in study.excluded)),
        ("Confidence level", level_words(study.level)),
        ("Money in", material.money_unit),
        ("Seed of every random stream", str(study.seed)),
    ]
    cells = tuple((Text(key), Text(value)) for key, value in rows if value)
    columns = (Column("Setting"), Column("Value", prose=True))
    return Table("settings", prose("Settings of the study"), columns, cells)


def _window_settings(material: Material) -> list[tuple[str, str]]:
    study = material.study
    secondary = [window_label(w.label) for w in study.windows if w != study.headline]
    return [
        ("Deals announced", _announced(material)),
        ("Headline window, sessions", window_label(study.headline.label)),
        ("Secondary windows, sessions", joined(secondary)),
        ("Estimation window, sessions", window_label(study.estimation.label)),
        ("Returns an estimation window must hold", f"{study.minimum_observations:,}"),
        ("Expected return", joined(study.words(model) for model in study.models)),
    ]


def _outcome_settings(material: Material) -> list[tuple[str, str]]:
    asked, deals = material.study.outcome, material.results.deals
    dated = next((name for name in ("announced_date", asked.date) if name in deals), "")
    days = pd.to_datetime(deals[dated]).dropna() if dated else pd.Series(dtype="datetime64[s]")
    return [
        ("Outcome", asked.words),
        ("Taken from", f"column '{asked.column}' of {asked.file}, in {asked.unit.key}"),
        ("Its standard error from", f"column '{asked.error}'" if asked.error else ""),
        ("A share of", material.study.words(asked.base) if asked.base else ""),
        ("Deals dated", _first_to_last(days)),
    ]


def _announced(material: Material) -> str:
    """First and last event session of the deals kept, from the abnormal returns' dates."""
    abnormal = material.results.abnormal.get(material.tests.model)
    if abnormal is None or not abnormal.span.start <= 0 <= abnormal.span.end:
        return ""
    return _first_to_last(pd.Series(abnormal.days[:, -abnormal.span.start]).dropna())


def _first_to_last(days: pd.Series) -> str:
    if days.empty:
        return ""
    first, last = str(days.min().date()), str(days.max().date())
    return first if first == last else f"{first} to {last}"


def attrition_section(material: Material) -> Section:
    """Who was lost where and why, and who was kept with a flag."""
    flagged, changed = material.number("deals_flagged"), material.number("deals_changed")
    sentence = prose("Deals kept with a flag: ", flagged, ". Deals with a value changed by a "
                     "rule: ", changed, ".")  # fmt: skip
    blocks = (attrition_table(material), sentence, flags_table(material))
    return Section("From the deal list to the sample", blocks)


def attrition_table(material: Material) -> Table:
    """Stage by stage: rows in, dropped by reason, kept."""
    columns = (
        Column("Stage"), Column("Rows in", "deals"), Column("Dropped because", prose=True),
        Column("Dropped", "deals"), Column("Kept", "deals"),
    )  # fmt: skip
    rows = tuple(row for stage in material.results.ledger.stages for row in _stage_rows(stage))
    return Table("attrition", prose("Rows in, dropped and kept, stage by stage"), columns, rows)


def _stage_rows(stage: StageLedger) -> list[Row]:
    reasons = Counter(entry.rule for entry in stage.dropped)
    total: Row = (
        Text(spoken(stage.stage)), count(stage.rows_in),
        Text("all reasons" if len(reasons) > 1 else ""),
        count(len(stage.dropped)), count(stage.rows_kept),
    )  # fmt: skip
    if len(reasons) == 1:
        return [(*total[:2], Text(rule_title(next(iter(reasons)))), *total[3:])]
    ordered = sorted(reasons.items(), key=lambda item: (-item[1], item[0]))
    return [total, *((None, None, Text(rule_title(r)), count(n), None) for r, n in ordered)]


def flags_table(material: Material) -> Table:
    """How many deals were flagged or changed under each rule, and kept."""
    columns = (
        Column("Stage"), Column("Rule", prose=True), Column("What was done"),
        Column("Deals", "n"),
    )  # fmt: skip
    found: dict[tuple[str, str, str], set[str]] = {}
    for stage, entry in material.results.ledger:
        if entry.action is not Action.DROPPED:
            found.setdefault((stage, entry.rule, entry.action), set()).add(entry.deal)
    rows: list[tuple[Cell, ...]] = [
        (Text(spoken(stage)), Text(rule_title(rule)), Text(str(action)), count(len(deals)))
        for (stage, rule, action), deals in found.items()
    ]
    return Table("flags", prose("Deals flagged or changed, and kept"), columns, tuple(rows))
