"""From a folder of tables to a study file, what it asks and what it lacks."""

from __future__ import annotations

import os
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from pipeline.core.findings import Finding, Severity
from pipeline.drafting.agreement import agreed
from pipeline.drafting.beside import laid_long
from pipeline.drafting.features import outcome_of
from pipeline.drafting.kinds import Recognised, Sorted, sort_tables
from pipeline.drafting.lines import Line, answered, written
from pipeline.drafting.measured import measured_lines
from pipeline.drafting.outcomes import outcome_lines
from pipeline.drafting.roles import KINDS
from pipeline.drafting.signs import COMMA
from pipeline.drafting.sources import date_lines, source_lines, table_of
from pipeline.drafting.spelling import spellings
from pipeline.drafting.tables import Found, files_in, tables_in

NEEDED = {"deals": "deals", "prices": "prices", "benchmarks": "benchmarks"}
HEAD = (
    "A draft made from your own tables by 'dealwake draft'. Each value stands below its reason. "
    "Look at the lines that begin with 'Please confirm' and answer those that begin with "
    "'Question': take the # away before the key and write the value.",
    "Nothing was estimated for it: no reaction to any deal was looked at.",
)


@dataclass(frozen=True, slots=True)
class Draft:
    """A drafted study.

    Attributes:
        text: the study file.
        lines: its keys with their reasons.
        missing: errors: tables and columns that no study can do without.
        told: table in words -> what it was taken for, or why it was not used.
    """

    text: str
    lines: tuple[Line, ...]
    missing: tuple[Finding, ...]
    told: tuple[tuple[str, str], ...]

    @property
    def questions(self) -> tuple[Line, ...]:
        """Keys that only the analyst can fill."""
        return tuple(line for line in self.lines if line.open)

    @property
    def doubtful(self) -> tuple[Line, ...]:
        """Keys whose value is a guess with a near rival."""
        return tuple(line for line in self.lines if line.doubtful and not line.open)


def draft(folder: Path, place: Path, answers: Mapping[str, object]) -> Draft:
    """Draft a study file.

    Args:
        folder: holds the tables; each csv and parquet file and each sheet of xlsx files is one.
        place: where the study file will stand; paths in it count from its folder.
        answers: dotted key -> value, the analyst's own.

    Raises:
        InputProblem: ``missing_file`` if the folder holds no table.
    """
    tables, refused = tables_in(folder)
    kinds = agreed(_kinds(laid_long(tables)))
    spelled = spellings(answers, kinds, files_in(folder))
    if spelled:
        tables, refused = tables_in(folder, spelled)
        kinds = agreed(_kinds(laid_long(tables)))
    missing = [*refused, *_lacking(kinds)]
    lines = [*_title(kinds, folder)]
    if any(kind in kinds.by_kind for kind in ("deals", "ready")):
        lines += source_lines(kinds, place.parent)
        lines += date_lines(kinds, answers)
        ready = kinds.by_kind.get("ready")
        if ready is not None:
            lines += outcome_lines(ready, answers)
        else:
            more, absent = measured_lines(kinds, answers)
            lines += more
            missing += absent
    lines = answered(lines, dict(answers))
    told = [(_named(item.found), _taken(kind, item)) for kind, item in kinds.by_kind.items()]
    told += [(_named(found), f"not used: {why}") for found, why in kinds.left]
    head = (*HEAD, *(f"{name}: {words}." for name, words in told))
    return Draft(written(lines, head), tuple(lines), tuple(missing), tuple(told))


def _kinds(tables: list[Found]) -> Sorted:
    """The tables by kind; deals without prices whose list holds an outcome are a ready list."""
    priced = sort_tables(tables, priced=True)
    if "prices" in priced.by_kind:
        return priced
    ready = sort_tables(tables, priced=False)
    item = ready.by_kind.get("ready")
    if item is None or ("deals" in priced.by_kind and not outcome_of(item)[0]):
        return priced
    return ready


def _named(found: Found) -> str:
    return os.path.basename(found.source.path) + (
        f", sheet {found.source.sheet}" if found.source.sheet else ""
    )


def _taken(kind: str, item: Recognised) -> str:
    name = "a deal list that holds its outcome" if kind == "ready" else kind
    doubt = f"; it might also be {item.rival}" if item.rival else ""
    return f"taken for {name}: {item.reason}{doubt}"


def _title(kinds: Sorted, folder: Path) -> list[Line]:
    return [
        Line("", "title", f"Deals of {folder.resolve().name}", "Title of the documents: yours."),
        Line("", "question", "Does the deal feature named below go with another outcome?",
             "What the committee wants to know, in your words.", doubtful=True),
    ]  # fmt: skip


def _lacking(kinds: Sorted) -> list[Finding]:
    """Tables that no study can do without, and columns that the tables found do not have."""
    found = []
    have = kinds.by_kind
    needed = () if "ready" in have else NEEDED
    unused = ", ".join(item.source.path.name for item, _ in kinds.left)
    for kind in needed:
        if kind not in have:
            layout = ", ".join(f"{role.name} ({role.layout})" for role in KINDS[kind] if role.must)
            reasons = "; ".join(f"{item.source.path.name} {why}" for item, why in kinds.left)
            found.append(
                Finding(
                    "missing_table",
                    Severity.ERROR,
                    "folder",
                    got=f"no table of {kind}" + (f"; not used: {unused}" if unused else ""),
                    expected=f"one with the columns {layout}",
                    remedy=(f"{reasons}." if reasons else "Put it into the folder.")
                    + " Whatever your columns are called, draft again.",
                    column=f"inputs.{kind}",
                )
            )
    for kind, item in have.items():
        for role in item.lacking:
            found.append(
                Finding(
                    "missing_column",
                    Severity.ERROR,
                    item.found.source.file,
                    got=f"no column that can be the {role.name.replace('_', ' ')} of the {kind}; "
                    "the table has " + ", ".join(item.found.signs),
                    expected=f"a column '{role.name}': {role.layout or 'a value in every row'}",
                    remedy=_remedy(item),
                    column=role.name,
                )
            )
    return found


def _remedy(item: Recognised) -> str:
    """What to do about a part that no column fits: a decimal comma hides columns of numbers."""
    if any(signs.trouble == COMMA for signs in item.found.signs.values()):
        return (
            "If it is the column with decimal commas, answer the question about them: draft again "
            f"with --answer inputs.source.{table_of(item.kind)}.decimal=,"
        )
    return (
        "Add the column to the file and draft again. If its headings stand lower down, draft again "
        f"with --answer inputs.source.{table_of(item.kind)}.header_row=3, say."
    )
