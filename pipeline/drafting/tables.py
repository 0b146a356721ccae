"""The tables of a folder, as the readers see them."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import pandas as pd

from pipeline.core.findings import Finding, InputProblem, problem
from pipeline.drafting.reading import read_as_written
from pipeline.drafting.signs import COMMA, Signs, signs_of
from pipeline.inputs.files import ROW, Source
from pipeline.inputs.numerals import with_points

LONG = 100_000
KINDS = (".csv", ".parquet", ".xlsx")


@dataclass(frozen=True, slots=True, eq=False)
class Found:
    """One table of the folder.

    Attributes:
        source: its file and, for any sheet but a workbook's first, its sheet.
        frame: its raw cells under lower-case names, without the row numbers.
        signs: column -> what its cells show.
    """

    source: Source
    frame: pd.DataFrame
    signs: Mapping[str, Signs]

    @property
    def words(self) -> str:
        """The words that name it: of its file and of its sheet."""
        return f"{self.source.path.stem} {self.source.sheet}".strip()

    def of_kind(self, kind: str) -> list[str]:
        """The columns of that kind."""
        return [name for name, sign in self.signs.items() if sign.kind == kind]

    def of_code(self, code: str) -> list[str]:
        """The columns whose cells are such codes."""
        return [name for name, sign in self.signs.items() if sign.code == code]

    def one_row_a(self, *key: str) -> bool:
        """Whether hardly any two rows share these columns."""
        return float(self.frame.duplicated(list(key)).mean()) < 0.01


def files_in(folder: Path) -> list[Path]:
    """The files of a folder that may hold tables, by name."""
    if not folder.is_dir():
        return []
    return sorted(path for path in folder.iterdir() if path.suffix.lower() in KINDS)


def tables_in(
    folder: Path, spelled: Mapping[Path, Mapping[str, Any]] | None = None
) -> tuple[list[Found], list[Finding]]:
    """Every table of a folder in the order of the files' names, and why others were not read.

    Args:
        folder: where they are.
        spelled: file -> how it is written, by the names of :class:`Source`.

    Raises:
        InputProblem: ``missing_file`` if there is no such folder or no table in it.
    """
    files = files_in(folder)
    if not files:
        raise problem(
            "missing_file",
            folder.name,
            got=f"no table in {folder}" if folder.is_dir() else f"no folder at {folder}",
            expected="a folder with your tables: files ending in " + ", ".join(KINDS),
            remedy="Put the deal list and the tables beside it into one folder and name that.",
        )
    found, refused = [], []
    for path in files:
        try:
            sources = list(_sources(path))
        except (ValueError, OSError, KeyError) as fault:
            refused.append(_unreadable(path, str(fault)))
            continue
        for source in sources:
            try:
                found.append(_found(replace(source, **(spelled or {}).get(path, {}))))
            except InputProblem as fault:
                refused += fault.findings
    return found, refused


def _sources(path: Path) -> Iterator[Source]:
    if path.suffix.lower() != ".xlsx":
        yield Source("folder", path)
        return
    with pd.ExcelFile(path, engine="openpyxl") as book:
        for at, sheet in enumerate(book.sheet_names):
            if book.book[str(sheet)].max_row > 1:
                yield Source("folder", path, sheet="" if at == 0 else str(sheet))


def _found(source: Source) -> Found:
    source, frame = read_as_written(source)
    frame = frame.drop(columns=ROW)
    frame.columns = pd.Index([str(name) for name in frame.columns])
    if len(frame) < LONG:  # a deal entered twice is no second deal
        frame = frame.drop_duplicates(ignore_index=True)
    return found_of(source, frame)


def found_of(source: Source, frame: pd.DataFrame) -> Found:
    """A table with the signs of its columns; numbers with a comma are read if that was answered."""
    signs = {name: signs_of(name, frame[name]) for name in frame.columns}
    for name in [name for name, sign in signs.items() if sign.trouble == COMMA]:
        frame[name] = with_points(frame[name], source)
        signs[name] = signs_of(name, frame[name])
    return Found(source, frame, signs)


def _unreadable(path: Path, fault: str) -> Finding:
    return problem(
        "unreadable_file",
        path.name,
        got=fault.splitlines()[0] if fault else "a file that does not open",
        expected="a table with a header in its first row",
        remedy="Open the file and save it again as csv (UTF-8), parquet or xlsx.",
    ).findings[0]
