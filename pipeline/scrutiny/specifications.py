"""The specification curve of a study: its cells as a frame, and the curve in numbers."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import pandas as pd

from pipeline.core.design import Design, FitOptions
from pipeline.core.prices import Booleans, Floats
from pipeline.core.tables import typed_frame
from pipeline.scrutiny import curve
from pipeline.scrutiny.grid import Cell, Choices, Summary, specification_grid

CELL_COLUMNS = {
    "outcome": "str",
    "controls": "str",
    "winsorise": "str",
    "sample": "str",
    "estimator": "str",
    "estimate": "float64",
    "std_error": "float64",
    "p_value": "float64",
    "n": "int64",
    "reason": "str",
}
SUMMARY_COLUMNS = {"name": "str", "value": "float64"}


def specifications(
    design: Design,
    outcomes: Mapping[str, Floats],
    samples: Mapping[str, Booleans],
    control_sets: Sequence[Sequence[str]],
    winsorise: Sequence[float],
    permutations: int,
    seed: int,
    options: FitOptions,
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Every declared way to make the least-squares estimate.

    Outcomes times control sets (all of them, none, and those declared) times winsorising of the
    outcome times samples times least squares with and without the fixed effects.

    Returns:
        The cells, the headline's first, decimal; and ``name, value`` of the curve: cells, failed,
        median, low, high, same_sign, significant and the permutation p-values.

    Raises:
        InputProblem: see :func:`~pipeline.scrutiny.grid.specification_grid`.
    """
    every = tuple(name for name in design.names if name not in ("constant", design.treatment))
    controls = {"all controls": every, "no controls": ()}
    for chosen in control_sets:
        controls[" and ".join(chosen)] = tuple(chosen)
    estimators = {"least squares": "ols"}
    if design.effects:
        estimators = {"fixed effects": "fixed_effects", **estimators}
    choices = Choices(
        outcomes=outcomes,
        controls=controls,
        winsorise={_share_words(share): share for share in winsorise},
        samples=samples,
        estimators=estimators,
    )
    grid = specification_grid(design, choices, options)
    found = curve.summary(grid)
    if permutations:
        found = curve.with_permutations(grid, found, permutations, seed)
    return _cells(grid.cells), _numbers(found)


def _share_words(share: float) -> str:
    return f"outcome winsorised at {share:.0%}" if share else "outcome as it is"


def _cells(cells: Sequence[Cell]) -> pd.DataFrame:
    rows = [{name: getattr(cell, name) for name in CELL_COLUMNS} for cell in cells]
    return typed_frame(rows, CELL_COLUMNS)


def _numbers(found: Summary) -> pd.DataFrame:
    names = (
        "cells",
        "failed",
        "median",
        "low",
        "high",
        "same_sign",
        "significant",
        "p_median",
        "p_same_sign",
        "p_significant",
    )
    rows = [{"name": name, "value": float(getattr(found, name))} for name in names]
    return typed_frame(rows, SUMMARY_COLUMNS)
