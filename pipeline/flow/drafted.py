"""A study file drafted from a folder, and what a check of it says."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from pipeline.core.clock import Progress
from pipeline.core.disk import write_file
from pipeline.core.findings import Finding, InputProblem, problem
from pipeline.drafting.make import Draft, draft
from pipeline.flow.commands import check
from pipeline.study.load import load_study

# The last line of a draft: drafting again may replace the file while it is as it was made.
SEAL = "# While nothing above is changed, drafting again replaces this file: "


@dataclass(frozen=True, slots=True)
class Drafted:
    """A written draft.

    Attributes:
        draft: what it holds, asks and lacks.
        place: the study file.
        checked: whether a check of it passes.
        findings: what the check says, or what is missing.
        kept: rows read and rows left for the last stage, where it passes.
    """

    draft: Draft
    place: Path
    checked: bool
    findings: tuple[Finding, ...]
    kept: tuple[int, int] = (0, 0)


def drafted(
    folder: Path, place: Path, answers: Mapping[str, object], progress: Progress = lambda _: None
) -> Drafted:
    """Draft a study, write it and check it.

    Raises:
        InputProblem: ``output_folder`` if there is a file at ``place`` that is no draft or was
            changed since it was drafted, ``missing_file`` if the folder holds no table.
    """
    if place.exists() and not _untouched(place):
        raise problem(
            "output_folder",
            place.name,
            got=f"a file at {place} that you wrote or changed",
            expected="a new file, or a draft as it was made, so that nothing you wrote is lost",
            remedy="Name another one with --out, or move the old one away.",
        )
    made = draft(folder, place, answers)
    if not any(line.path == "inputs.deals" for line in made.lines):
        raise InputProblem(made.missing)
    write_file(place, _sealed(made.text).encode(), "--out")
    if made.missing:
        return Drafted(made, place, False, made.missing)
    try:
        ledger, findings = check(load_study(place), progress)
    except InputProblem as fault:
        return Drafted(made, place, False, fault.findings)
    return Drafted(made, place, True, findings, (ledger.rows_in, ledger.rows_kept))


def _sealed(text: str) -> str:
    """The draft with a last line that tells whether it was changed."""
    seal = hashlib.sha256(text.encode()).hexdigest()[:16]
    return f"{text}\n{SEAL}{seal}\n"


def _untouched(place: Path) -> bool:
    """Whether the file is a draft that nobody has changed."""
    try:
        text, mark, _ = place.read_text(encoding="utf-8").rpartition(f"\n{SEAL}")
        return bool(mark) and _sealed(text) == place.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError):
        return False
