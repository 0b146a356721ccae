"""Parts of the sample: deals that meet a condition, and codes of what they have in common."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import pandas as pd

from pipeline.characteristics.design import words
from pipeline.characteristics.universe import codes
from pipeline.core.findings import problem
from pipeline.core.prices import Booleans, Integers


def meeting(
    deals: pd.DataFrame,
    column: str,
    equals: str | float | None,
    above: float | None,
    below: float | None,
    *,
    leave_out: bool,
    name: str,
) -> Booleans:
    """(n,) whether each of ``deals`` meets a condition on a column; a gap meets none.

    With ``leave_out`` the deals that meet it go; those with a gap then go too.

    Raises:
        InputProblem: ``unknown_variable`` for a column that is not there, ``grid_sample`` if no
            deal or every deal is kept; both name the key of the sample ``name``.
    """
    key = f"scrutiny.grid.samples.{name}"
    if column not in deals:
        raise problem(
            "unknown_variable",
            "deals",
            column=key,
            got=f"'{column}'",
            expected="a column of the deals, or a characteristic of the study",
            remedy="Correct the name.",
        )
    values = deals[column]
    if isinstance(equals, str):
        met, known = values.astype("str").eq(equals), values.notna()
    else:
        numbers = pd.to_numeric(values, errors="coerce")
        known = numbers.notna()
        met = numbers.eq(equals) if equals is not None else known
        met = met & (numbers.gt(above) if above is not None else known)
        met = met & (numbers.lt(below) if below is not None else known)
    kept = np.asarray(known & (~met if leave_out else met), dtype=np.bool_)
    if kept.all() or not kept.any():
        raise problem(
            "grid_sample",
            "deals",
            column=key,
            got="every deal" if kept.all() else "no deal",
            expected="some of the deals",
            remedy="Change the condition, or take the sample out of the grid.",
        )
    return kept


def grouped_by(
    deals: pd.DataFrame, names: Sequence[str]
) -> tuple[Mapping[str, Integers], Mapping[str, tuple[str, ...]]]:
    """Column -> (n,) codes of its values, and column -> the words behind the codes.

    Columns that are not there, have a gap or do not vary are passed over. Dates are days.
    """
    found: dict[str, Integers] = {}
    spelled: dict[str, tuple[str, ...]] = {}
    for name in names:
        if name not in deals or deals[name].isna().any() or deals[name].nunique() < 2:
            continue
        values = deals[name]
        if pd.api.types.is_datetime64_any_dtype(values):
            values = values.dt.strftime("%Y-%m-%d")
        found[name], spelled[name] = codes(values), words(values)
    return found, spelled
