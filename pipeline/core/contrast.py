"""Two saved runs held side by side: the values that a comparison of them is made of."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from enum import StrEnum
from pathlib import Path
from typing import Any

import pandas as pd

from pipeline.core.house import PLAIN, House
from pipeline.core.outcome import ABNORMAL_RETURN, Outcome


class Kind(StrEnum):
    """What differs: a table that was read, a key of the study file, or a program's version."""

    INPUT = "input"
    SETTING = "setting"
    VERSION = "version"


@dataclass(frozen=True, slots=True, eq=False)
class SavedRun:
    """What a run left in its folder.

    Attributes:
        name: the folder's name.
        folder: the folder.
        study: the resolved study as plain values, without the paths of its tables.
        inputs: table -> file name, path relative to the folder, and SHA-256 if it was read.
        versions: program -> version.
        numbers: the headline frame.
        deals: the deals kept, one row each.
        ledger: why the others are not.
        titles: estimator -> the title of its column.
    """

    name: str
    folder: Path
    study: Mapping[str, Any]
    inputs: Mapping[str, Mapping[str, str]]
    versions: Mapping[str, str]
    numbers: pd.DataFrame
    deals: pd.DataFrame
    ledger: pd.DataFrame
    titles: Mapping[str, str]


@dataclass(frozen=True, slots=True)
class Difference:
    """One thing that is not the same in both runs.

    ``where`` is the table's name, the key with dots, or the program; ``moves`` whether a headline
    estimate can depend on it.
    """

    kind: Kind
    where: str
    first: str
    second: str
    moves: bool = True


@dataclass(frozen=True, slots=True, eq=False)
class Contrast:
    """Two runs side by side.

    Attributes:
        first, second: the runs' names.
        differences: what is not the same.
        numbers: ``number, unit, first, second, move`` of each headline number, as stored.
        explained: ``difference, number, move, share``: the first run made again with that
            difference alone; the rows ``together`` hold what the differences move only jointly.
        deals: ``deal, first, second``: kept or why not, of deals that not both runs keep.
        moved: ``deal, first, second, move`` of the outcome of deals in both, largest move first.
        titles: estimator -> the title of its column.
        notes: what could not be made again, and why.
        outcome: what both runs explain.
        house: the style of the later run's papers, without its logo.
    """

    first: str
    second: str
    differences: tuple[Difference, ...]
    numbers: pd.DataFrame
    explained: pd.DataFrame
    deals: pd.DataFrame
    moved: pd.DataFrame
    titles: Mapping[str, str]
    notes: tuple[str, ...] = ()
    outcome: Outcome = ABNORMAL_RETURN
    house: House = PLAIN
