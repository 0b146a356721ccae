"""Every command as a function: a study in, typed values and frames out; nothing is printed.

A study is a :class:`~pipeline.study.schema.Study` or the path of its file. Bad input raises
:class:`~pipeline.core.findings.InputProblem`, whose ``findings`` say what, where and what to do;
:func:`check` gives them back instead.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import pandas as pd

from pipeline.core.clock import Clock, Progress
from pipeline.core.findings import InputProblem, findings_frame, problem
from pipeline.core.ledger import LedgerEntry
from pipeline.core.outcome import Standing
from pipeline.core.results import Results
from pipeline.core.rules import RULES, Rule
from pipeline.flow import commands, contrasted
from pipeline.flow.checked import check_with_rows
from pipeline.flow.drafted import Drafted, drafted
from pipeline.report import contrast as contrast_report
from pipeline.report.finding import finding_text
from pipeline.significance.story import Story
from pipeline.study.load import load_study
from pipeline.study.schema import Study

Given = Study | Path | str
Frames = Mapping[str, pd.DataFrame]


@dataclass(frozen=True, slots=True, eq=False)
class Run:
    """A finished run.

    Attributes:
        study: as resolved.
        results: everything that was made.
        seconds: stage -> seconds it took.
    """

    study: Study
    results: Results
    seconds: Mapping[str, float]

    @property
    def finding(self) -> str:
        """The finding in words, as the report says it."""
        return finding_text(self.results)

    @property
    def tables(self) -> Frames:
        """The frames that a run leaves under ``data/``, by name: deals, estimates, ledger..."""
        return self.results.tables

    def save(self, folder: Path | str) -> list[str]:
        """Write documents, data and manifest, whole or not at all; gives the files' names.

        Raises:
            InputProblem: ``output_folder`` if the folder holds anything but an earlier run.
        """
        from pipeline.core.store import refuse_foreign
        from pipeline.saving import save

        place = Path(folder)
        refuse_foreign(place)
        return save(self.study, self.results, self.seconds, place, Clock(lambda _: None))

    def _repr_html_(self) -> str | None:
        return self.results._repr_html_()


@dataclass(frozen=True, slots=True, eq=False)
class Checked:
    """What a check says.

    Attributes:
        passes: whether a run would go on.
        findings: ``rule, severity, file, row, column, got, expected, remedy``.
        ledger: every deal lost or marked, by stage; empty where the check stops.
    """

    passes: bool
    findings: pd.DataFrame
    ledger: pd.DataFrame


@dataclass(frozen=True, slots=True, eq=False)
class Told:
    """One deal's story.

    Attributes:
        row: what the deal list and the run say of it.
        standing: its reaction, or its outcome, among the others; None if it was left out.
        days: ``day, date, abnormal, expected, reach`` (decimal), one row an event day.
        ledger: ``stage, deal, rule, action, value, threshold``.
    """

    row: Mapping[str, Any]
    standing: Story | Standing | None
    days: pd.DataFrame
    ledger: pd.DataFrame


@dataclass(frozen=True, slots=True, eq=False)
class Power:
    """What a sample can find: ``effect, power, deals_needed`` (decimal) a row, the smallest true
    mean found four times in five (decimal), and the deals.
    """

    frame: pd.DataFrame
    smallest: float
    deals: int


def run(study: Given, progress: Progress = lambda _: None, *, fresh: bool = False) -> Run:
    """Run a study; nothing is written until :meth:`Run.save`.

    Args:
        study: the study, or the path of its file.
        progress: told the name of each stage as it begins.
        fresh: make again what an earlier run has kept.

    Raises:
        InputProblem: with every finding of the stage that could not go on.
    """
    asked = _study(study)
    results, seconds = commands.run(asked, progress, fresh)
    return Run(asked, results, seconds)


def check(study: Given, rows: Path | str | None = None) -> Checked:
    """Read and check everything; ``rows`` names a workbook for the rows to correct.

    Raises:
        InputProblem: only if the study file itself cannot be read, or ``rows`` cannot be written.
    """
    asked = _study(study)
    place = Path(rows) if rows is not None else None
    try:
        ledger, findings = check_with_rows(asked, place)
    except InputProblem as fault:
        if any(finding.rule == "output_folder" for finding in fault.findings):
            raise
        return Checked(False, findings_frame(fault.findings), pd.DataFrame())
    return Checked(True, findings_frame(findings), ledger.frame())


def deal(study: Given, name: str) -> Told:
    """One deal's story.

    Raises:
        InputProblem: as a run would, or ``unknown_variable`` if the list has no such deal.
    """
    standing, row, told = commands.deal(_study(study), name)
    days = standing.days if isinstance(standing, Story) else ()
    columns = ["day", "date", "abnormal", "expected", "reach"]
    return Told(
        row, standing, pd.DataFrame([asdict(day) for day in days], columns=columns), _lines(told)
    )


def _lines(told: list[tuple[str, LedgerEntry]]) -> pd.DataFrame:
    rows = [{"stage": stage, **asdict(entry)} for stage, entry in told]
    columns = ["stage", "deal", "rule", "action", "value", "threshold"]
    return pd.DataFrame(rows, columns=columns).astype("str")


def power(study: Given) -> Power:
    """How small a mean reaction the study's deals can find.

    Raises:
        InputProblem: as a check would, or ``outcome_and_returns`` for an outcome the list holds.
    """
    return Power(*commands.power(_study(study)))


def contrast_runs(first: Path | str, second: Path | str) -> Frames:
    """What differs between two saved runs, what moved and what explains it, as frames by name.

    Raises:
        InputProblem: ``no_run`` or ``different_outcomes``.
    """
    return contrast_report.frames(contrasted.contrast(Path(first), Path(second)))


def draft(
    folder: Path | str, out: Path | str | None = None, answers: Mapping[str, object] | None = None
) -> Drafted:
    """Write a study file from a folder of tables, and check it.

    Args:
        folder: holds the tables.
        out: the study file; ``study.toml`` in the folder if None. Never written over.
        answers: dotted key -> value, such as ``{"inputs.timestamp_zone": "Europe/London"}``.

    Raises:
        InputProblem: ``missing_file``, ``missing_table`` or ``output_folder``.
    """
    place = Path(folder) / "study.toml" if out is None else Path(out)
    return drafted(Path(folder), place, answers or {})


def explain(rule: str) -> Rule:
    """The page of a rule: meaning, why, example, remedy.

    Raises:
        InputProblem: ``unknown_key`` if there is none of that key.
    """
    if rule not in RULES:
        raise problem(
            "unknown_key",
            "catalogue of rules",
            got=f"'{rule}'",
            expected="the key of a rule, as findings and the ledger carry it",
            remedy="Compare with RULES of pipeline.core.rules.",
        )
    return RULES[rule]


def _study(given: Given) -> Study:
    return given if isinstance(given, Study) else load_study(Path(given))
