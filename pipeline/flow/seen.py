"""What the files of a study held when a run began, and whether they still do."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

from pipeline.core.findings import Finding, InputProblem, Severity, raise_errors
from pipeline.saving import digest
from pipeline.study import plan
from pipeline.study.schema import Study

LOGO = "logo"


@dataclass(frozen=True, slots=True)
class Seen:
    """The files of a study at one moment.

    Attributes:
        digests: table -> SHA-256 of its file; tables without a file are not among them.
        stamps: table -> size and time of writing, which say at once that nothing was written.
    """

    digests: Mapping[str, str]
    stamps: Mapping[str, tuple[int, int]]


def files_of(study: Study) -> dict[str, Path]:
    """Every file whose content enters a run, by table; the house's logo besides."""
    sources = plan.sources(study)
    files = {name: item.path for name, item in sources.items() if not item.is_postgres}
    if study.papers.logo is not None:
        files[LOGO] = study.papers.logo
    return files


def seen(study: Study) -> Seen:
    """What the files hold now; one that is missing is told of where it is read."""
    there = {name: path for name, path in files_of(study).items() if path.is_file()}
    # The stamp is taken first: a file written between the two then has another one afterwards.
    stamps = {name: _stamp(path) for name, path in there.items()}
    return Seen({name: digest(path) for name, path in there.items()}, stamps)


@contextmanager
def unchanged(study: Study, before: Seen | None = None) -> Iterator[Seen]:
    """Read within it: refuses files written, or gone, since ``before``, or since now.

    What the reader found wrong with such a file is not told: it saw a part of it.

    Raises:
        InputProblem: ``changed_file``, one finding a file.
    """
    before = before or seen(study)
    try:
        yield before
    except InputProblem:
        _refuse_written(study, before)
        raise
    _refuse_written(study, before)


def _refuse_written(study: Study, before: Seen) -> None:
    files = files_of(study)
    doubted = [name for name in before.stamps if _stamp(files[name]) != before.stamps[name]]
    refuse_changed(study, {name: before.digests[name] for name in doubted})


def refuse_changed(study: Study, digests: Mapping[str, str]) -> None:
    """Refuse results of files that do not hold now what they held before.

    Args:
        study: the study.
        digests: table -> SHA-256 of what its file held; tables without a file are passed over.

    Raises:
        InputProblem: ``changed_file``, one finding a file.
    """
    files = files_of(study)
    raise_errors(
        _finding(name, files[name], now)
        for name, before in digests.items()
        if name in files and (now := _now(files[name])) != before
    )


def _stamp(path: Path) -> tuple[int, int]:
    try:
        facts = path.stat()
    except OSError:
        return (-1, 0)
    return facts.st_size, facts.st_mtime_ns


def _now(path: Path) -> str:
    """The digest of a file; '' if it cannot be read any more."""
    try:
        return digest(path)
    except OSError:
        return ""


def _finding(name: str, path: Path, now: str) -> Finding:
    got = f"other content than when the run began, {path.stat().st_size:,} bytes" if now else ""
    return Finding(
        "changed_file",
        Severity.ERROR,
        path.name,
        got=got or "a file that was there when the run began and cannot be read any more",
        expected="a file that nobody writes while it is read",
        remedy="Wait until whoever writes it has finished, or work from a copy; then run again.",
        column="papers.logo" if name == LOGO else f"inputs.{name}",
    )
