"""A check whose offending rows are kept for whoever can correct them."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from pipeline.core.clock import Progress
from pipeline.core.disk import write_file
from pipeline.core.findings import Finding, InputProblem, problem
from pipeline.core.ledger import Ledger
from pipeline.flow.commands import check
from pipeline.flow.offending import offending_rows
from pipeline.study.schema import Study


def check_with_rows(
    study: Study, place: Path | None, progress: Progress = lambda _: None
) -> tuple[Ledger, tuple[Finding, ...]]:
    """A check; the rows that it names go to the workbook at ``place`` if one is asked for.

    The workbook is written where the check stops, too.

    Raises:
        InputProblem: as a check would, or ``output_folder`` if ``place`` cannot take the workbook:
            nothing but an earlier one is written over.
    """
    if place is None:
        return check(study, progress)
    _refuse_place(place)
    try:
        ledger, findings = check(study, progress)
    except InputProblem as fault:
        _write(study, fault.findings, None, place)
        raise
    _write(study, findings, ledger, place)
    return ledger, findings


def _write(study: Study, findings: Sequence[Finding], ledger: Ledger | None, place: Path) -> None:
    from pipeline.report.offending import workbook

    content = workbook(offending_rows(study, findings, ledger))
    write_file(place, content, "--rows")


def _refuse_place(place: Path) -> None:
    from pipeline.report.offending import is_ours

    wrong = ""
    if place.suffix.lower() != ".xlsx":
        wrong = f"'{place.name}', which is no name of a workbook"
    elif place.exists() and not (place.is_file() and is_ours(place.read_bytes())):
        wrong = f"something else at {place}"
    if wrong:
        raise problem(
            "output_folder",
            place.name,
            column="--rows",
            got=wrong,
            expected="a new file ending in .xlsx, or one that an earlier check wrote",
            remedy="Name another file.",
        )
