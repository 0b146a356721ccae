"""What the analyst answered about how the file of a table is written."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

from pipeline.drafting.kinds import Sorted
from pipeline.drafting.likeness import likeness
from pipeline.drafting.words import TABLES

KEYS = ("delimiter", "encoding", "decimal", "header_row")

Spelling = Mapping[str, Any]


def spellings(answers: Mapping[str, object], kinds: Sorted, files: Iterable[Path]) -> dict[
    Path, Spelling
]:  # fmt: skip
    """File -> what the analyst answered about how it is written.

    An answer names a kind of table. Its file is the one answered under [inputs], or else the one
    taken for that kind, or else the only one whose name speaks of it.

    Args:
        answers: dotted key -> value.
        kinds: what the tables were taken for without the answers.
        files: all files of the folder.
    """
    said: dict[str, dict[str, Any]] = {}
    for path, value in answers.items():
        section, _, key = path.rpartition(".")
        if section.startswith("inputs.source.") and key in KEYS:
            said.setdefault(section.removeprefix("inputs.source."), {})[key] = value
    every = list(files)
    placed = {kind: _file_of(kind, answers, kinds, every) for kind in said}
    return {path: said[kind] for kind, path in placed.items() if path is not None}


def _file_of(
    kind: str, answers: Mapping[str, object], kinds: Sorted, files: Sequence[Path]
) -> Path | None:
    named = str(answers.get(f"inputs.{kind}", ""))
    for path in files:
        if named and path.name == Path(named).name:
            return path
    taken = kinds.by_kind.get(kind) or (kinds.by_kind.get("ready") if kind == "deals" else None)
    if taken is not None:
        return taken.found.source.path
    alike = [path for path in files if likeness(path.stem, TABLES.get(kind, ()))]
    return alike[0] if len(alike) == 1 else None
