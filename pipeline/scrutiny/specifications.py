"""The specification curve of a study: its cells as a frame, and the curve in numbers."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, fields

import pandas as pd

from pipeline.core.design import Design, FitOptions
from pipeline.core.prices import Booleans, Floats
from pipeline.core.tables import typed_frame
from pipeline.scrutiny import curve
from pipeline.scrutiny.grid import (
    MOST_CELLS,
    Cell,
    Choices,
    Fit,
    Grid,
    Summary,
    Tell,
    specification_grid,
)

CELL_COLUMNS = {
    "outcome": "str",
    "controls": "str",
    "winsorise": "str",
    "sample": "str",
    "estimator": "str",
    "estimate": "float64",
    "std_error": "float64",
    "p_value": "float64",
    "p_step_down": "float64",
    "p_holm": "float64",
    "q_false_discovery": "float64",
    "n": "int64",
    "reason": "str",
}
SUMMARY_COLUMNS = {"name": "str", "value": "float64"}


WORDS = {
    "ols": "least squares",
    "fixed_effects": "fixed effects",
    "two_stage_least_squares": "two-stage least squares",
}


def estimator_words(key: str) -> str:
    """An estimator as a choice is called."""
    return WORDS.get(key, key.replace("_", " "))


@dataclass(frozen=True, slots=True)
class Wanted:
    """What a study asks of the curve.

    Attributes:
        control_sets: beside all controls and none.
        winsorise: shares of the outcome set to its quantile at either end.
        estimators: keys, the headline's first; least squares with and without the design's
            effects if empty.
        fits: functions of the keys that are not least squares.
        permutations: draws of the test of the whole curve, 0 for none.
        adjusted_by: draws of the step-down p-values of all cells, 0 for none.
        most_cells, allow: the limit of the grid, and whether it may be passed.
        seed: of the draws.
    """

    control_sets: Sequence[Sequence[str]] = ()
    winsorise: Sequence[float] = (0.0,)
    estimators: Sequence[str] = ()
    fits: Mapping[str, Fit] = field(default_factory=dict)
    permutations: int = 0
    adjusted_by: int = 0
    most_cells: int = MOST_CELLS
    allow: bool = False
    seed: int = 0


def specifications(
    design: Design,
    outcomes: Mapping[str, Floats],
    samples: Mapping[str, Booleans],
    wanted: Wanted,
    options: FitOptions,
    tell: Tell = lambda done, total: None,
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Every declared way to make the estimate.

    Outcomes times control sets (all of them, none, and those declared) times winsorising of the
    outcome times samples times estimators.

    Returns:
        The cells, the headline's first, decimal, with p-values by themselves and with all cells
        allowed for; and ``name, value`` of the curve: cells, failed, median, low, high, same_sign,
        significant, significant_adjusted and the permutation p-values.

    Raises:
        InputProblem: see :func:`~pipeline.scrutiny.grid.specification_grid`.
    """
    grid = specification_grid(design, _choices(design, outcomes, samples, wanted), options, tell)
    found = curve.summary(grid)
    if wanted.permutations and grid.blocks:
        found = curve.with_permutations(grid, found, wanted.permutations, wanted.seed)
    cells = _cells(grid.cells)
    if wanted.adjusted_by:
        cells = _with_adjusted(cells, grid, wanted)
    return cells, _numbers(found, cells)


def _choices(
    design: Design,
    outcomes: Mapping[str, Floats],
    samples: Mapping[str, Booleans],
    wanted: Wanted,
) -> Choices:
    every = tuple(name for name in design.names if name not in ("constant", design.treatment))
    controls = {"all controls": every, "no controls": ()}
    for chosen in wanted.control_sets:
        controls[" and ".join(chosen)] = tuple(chosen)
    both = ("fixed_effects", "ols") if design.effects else ("ols",)
    return Choices(
        outcomes=outcomes,
        controls=controls,
        winsorise={_share_words(share): share for share in wanted.winsorise},
        samples=samples,
        estimators={estimator_words(key): key for key in wanted.estimators or both},
        fits=wanted.fits,
        most_cells=wanted.most_cells,
        allow=wanted.allow,
    )


def _with_adjusted(cells: pd.DataFrame, grid: Grid, wanted: Wanted) -> pd.DataFrame:
    """The cells with p-values that allow for all of them, where their influences are known."""
    usable, found = curve.adjusted_cells(grid, wanted.adjusted_by, wanted.seed)
    told = cells.copy()
    for name, values in (
        ("p_step_down", found.romano_wolf),
        ("p_holm", found.holm),
        ("q_false_discovery", found.benjamini_hochberg),
    ):
        told.loc[list(usable), name] = values
    return told


def _share_words(share: float) -> str:
    return f"outcome winsorised at {share:.0%}" if share else "outcome as it is"


def _cells(cells: Sequence[Cell]) -> pd.DataFrame:
    nan = float("nan")
    rows = [{name: getattr(cell, name, nan) for name in CELL_COLUMNS} for cell in cells]
    return typed_frame(rows, CELL_COLUMNS)


def _numbers(found: Summary, cells: pd.DataFrame) -> pd.DataFrame:
    names = [item.name for item in fields(found)]
    rows = [{"name": name, "value": float(getattr(found, name))} for name in names]
    adjusted = cells["p_step_down"].dropna()
    share = float((adjusted < curve.SIGNIFICANCE).mean()) if len(adjusted) else float("nan")
    return typed_frame([*rows, {"name": "significant_adjusted", "value": share}], SUMMARY_COLUMNS)
