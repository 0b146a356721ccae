"""Two saved runs side by side, and the first made again with each difference alone."""

from __future__ import annotations

import json
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

import pandas as pd

from pipeline.contrast.differences import deals_between, differences, moved_deals, numbers
from pipeline.contrast.runs import read_run
from pipeline.core.clock import Progress
from pipeline.core.contrast import Contrast, Difference, Kind, SavedRun
from pipeline.core.findings import InputProblem, problem
from pipeline.core.house import House
from pipeline.core.outcome import Outcome, with_decimals
from pipeline.flow.commands import run
from pipeline.inputs.source import POSTGRES
from pipeline.saving import digest
from pipeline.study.load import restored
from pipeline.study.papers import Papers, house_of
from pipeline.study.ready import outcome_named

MOST_ALONE = 12
VERSIONS = "versions of the programs"
TOGETHER = "together"
Steps = Mapping[str, tuple[Difference, ...]]

# Why a table cannot be read again: a file, or a data base.
CHANGED = {
    False: "is no longer the file that was read",
    True: "came from a data base, which may have changed since",
}


def contrast(first: Path, second: Path, progress: Progress = lambda _: None) -> Contrast:
    """What differs between two saved runs, and how much of each move each difference explains.

    Raises:
        InputProblem: if one of the folders holds no run, or they explain different outcomes.
    """
    one, two = read_run(first), read_run(second)
    outcome = _outcome(one, two)
    found = differences(one, two)
    moves = numbers(one.numbers, two.numbers)
    explained, notes = _explained(one, two, found, moves, progress)
    house = _house(two)
    return Contrast(
        first=one.name,
        second=two.name,
        differences=found,
        numbers=moves,
        explained=explained,
        deals=deals_between(one, two),
        moved=moved_deals(one, two),
        titles={**one.titles, **two.titles},
        notes=notes,
        outcome=with_decimals(outcome, house.decimals),
        house=house,
    )


def _house(run: SavedRun) -> House:
    """The style of a run's papers; its logo is not among what a run keeps."""
    return house_of(Papers.model_validate_json(json.dumps(run.study.get("papers", {}))))


def _outcome(one: SavedRun, two: SavedRun) -> Outcome:
    """What both runs explain.

    Raises:
        InputProblem: ``different_outcomes`` if they do not explain the same.
    """
    first, second = (
        outcome_named(
            run.study.get("outcome"),
            run.study["report"]["currency"],
            run.study.get("papers", {}).get("money", ""),
        )
        for run in (one, two)
    )
    if (first.column, first.unit.scale) == (second.column, second.unit.scale):
        return first
    raise problem(
        "different_outcomes",
        f"{one.name} and {two.name}",
        got=f"{first.words} in {first.unit.words} and {second.words} in {second.unit.words}",
        expected="two runs that explain the same outcome in the same unit",
        remedy="Compare runs of one outcome.",
    )


def _explained(
    one: SavedRun,
    two: SavedRun,
    found: tuple[Difference, ...],
    moves: pd.DataFrame,
    progress: Progress,
) -> tuple[pd.DataFrame, tuple[str, ...]]:
    """The moves of each difference alone, and what they move only together."""
    steps = _steps(found)
    lost = _lost(one) + _lost(two)
    if not steps or lost:
        return _table([], moves), lost
    notes: list[str] = []
    rows: list[tuple[str, pd.DataFrame]] = []
    base = one.numbers
    for name, parts in steps.items():
        progress(name)
        values, inputs = dict(one.study), dict(_paths(one))
        for part in parts:
            if part.kind is not Kind.VERSION:
                values, inputs = _changed(values, inputs, part, two)
        try:
            made = _headline(values, inputs)
        except InputProblem as fault:
            notes.append(f"{name} could not be changed alone: {fault.findings[0].got}.")
            continue
        rows.append((name, numbers(base, made)))
        base = made if name == VERSIONS else base
    return _table(rows, moves), tuple(notes)


def _steps(found: Iterable[Difference]) -> Steps:
    """What to change at a time: each difference, or each table of the study if they are many."""
    moving = [item for item in found if item.moves]
    steps: dict[str, tuple[Difference, ...]] = {}
    many = sum(item.kind is Kind.SETTING for item in moving) > MOST_ALONE
    for item in sorted(moving, key=lambda item: item.kind is not Kind.VERSION):
        name = item.where
        if item.kind is Kind.VERSION:
            name = VERSIONS
        elif item.kind is Kind.SETTING and many:
            name = item.where.split(".")[0]
        steps[name] = (*steps.get(name, ()), item)
    return steps


def _lost(run: SavedRun) -> tuple[str, ...]:
    """Why the run cannot be made again: tables that are gone, or are no longer what they were."""
    return tuple(
        f"{run.inputs[table]['file']} of {run.name} {CHANGED[path == POSTGRES]}: nothing was made "
        "again."
        for table, path in _paths(run).items()
        if run.inputs[table]["sha256"]
        and not (path.is_file() and digest(path) == run.inputs[table]["sha256"])
    )


def _paths(run: SavedRun) -> dict[str, Path]:
    return {
        table: POSTGRES if file["path"] == POSTGRES.name else (run.folder / file["path"]).resolve()
        for table, file in run.inputs.items()
    }


def _changed(
    values: dict[str, Any], inputs: dict[str, Path], item: Difference, two: SavedRun
) -> tuple[dict[str, Any], dict[str, Path]]:
    """The first run's study with one difference as in the second."""
    if item.kind is Kind.INPUT:
        kept = {table: path for table, path in inputs.items() if table != item.where}
        theirs = _paths(two)
        return values, {**kept, **{t: theirs[t] for t in (item.where,) if t in theirs}}
    return _with(values, item.where.split("."), two.study), inputs


def _with(values: Mapping[str, Any], key: list[str], source: Mapping[str, Any]) -> dict[str, Any]:
    """``values`` with the value at ``key`` as ``source`` has it; without it if it has none."""
    head, rest = key[0], key[1:]
    changed = dict(values)
    if head not in source:
        changed.pop(head, None)
    elif rest and isinstance(source[head], Mapping):
        inner = changed.get(head)
        changed[head] = _with(inner if isinstance(inner, Mapping) else {}, rest, source[head])
    else:
        changed[head] = source[head]
    return changed


def _headline(values: Mapping[str, Any], paths: Mapping[str, Path]) -> pd.DataFrame:
    """The headline frame of a study, without the checks that move no number of it."""
    quick = {
        **values,
        "placebo": {**values["placebo"], "draws": 0},
        "scrutiny": {**values["scrutiny"], "run": False},
    }
    results, _ = run(restored(quick, paths))
    return results.tables["headline"]


def _table(rows: list[tuple[str, pd.DataFrame]], moves: pd.DataFrame) -> pd.DataFrame:
    """``difference, number, move, share``; the move that is left stands under ``together``."""
    total = moves.set_index("number")["move"]
    alone = {name: frame.set_index("number")["move"].reindex(total.index) for name, frame in rows}
    if alone:
        alone[TOGETHER] = total - sum(part.fillna(0.0) for part in alone.values())
    content = [
        {"difference": name, "number": number, "move": move, "share": _share(move, whole)}
        for name, part in alone.items()
        for number, move, whole in zip(total.index, part, total, strict=True)
    ]
    return pd.DataFrame(content, columns=["difference", "number", "move", "share"])


def _share(move: float, total: float) -> float:
    return move / total if abs(total) > 1e-12 else float("nan")
