"""Every deal of the list with the treatment, whether or not its outcome is seen."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd

from pipeline.characteristics.design import Roles
from pipeline.characteristics.recipes import Recipe, raw_variables
from pipeline.characteristics.universe import codes
from pipeline.core.design import Design, SelectionRows
from pipeline.core.findings import problem, raise_errors
from pipeline.core.prices import Booleans, Floats, Integers


@dataclass(frozen=True, slots=True, eq=False)
class ObservedDeals:
    """The deals seen as a design whose ``selection`` holds the whole list.

    ``cells`` (A,) are codes of the list's rows.
    """

    design: Design
    cells: Integers


def observed_deals(
    listed: pd.DataFrame,
    measured: pd.DataFrame,
    recipes: Mapping[str, Recipe],
    roles: Roles,
    flag: str,
    cells: Sequence[str],
) -> ObservedDeals:
    """The list with the treatment of every deal, its outcome where it is seen.

    An outcome is seen if it was measured and, where ``flag`` names a column, if that column is
    one. Deals whose treatment is not known are in neither arm and leave.

    Args:
        listed: every deal read, with ``deal_id``.
        measured: the deals measured, with the outcome.
        recipes, roles: as for the regression; the treatment must come from the list itself.
        flag: column of zeros and ones, or ''.
        cells: columns whose values make the cells.

    Raises:
        InputProblem: ``treatment_not_known``, ``flag_not_binary``, ``no_variation``, or an
            impossible treatment.
    """
    D = _treatment(listed, recipes, roles.treatment)
    outcome = measured.set_index(measured["deal_id"].astype(str))[roles.outcome]
    y = listed["deal_id"].astype(str).map(outcome).to_numpy(np.float64)
    known = np.isfinite(D)
    seen = np.isfinite(y)
    if flag:
        seen &= _flag(listed, flag) == 1.0
    table, seen, y, D = listed[known], seen[known], y[known], D[known]
    _refuse_one_sided(D, seen, roles.treatment)
    rows = SelectionRows(
        W=np.column_stack([np.ones(len(D)), D]),
        names=("constant", roles.treatment),
        excluded=(),
        selected=seen,
        outcome_row=np.where(seen, np.cumsum(seen) - 1, -1),
        clusters=_clusters(table, roles.clusters),
    )
    n = int(seen.sum())
    design = Design(
        y=y[seen],
        X=np.column_stack([np.ones(n), D[seen]]),
        names=("constant", roles.treatment),
        treatment=roles.treatment,
        rows=tuple(table.loc[seen, "deal_id"].astype(str)),
        outcome=roles.outcome_label,
        selection=rows,
    )
    return ObservedDeals(design, _cells(table, cells))


def _treatment(listed: pd.DataFrame, recipes: Mapping[str, Recipe], name: str) -> Floats:
    recipe = recipes.get(name)
    if recipe is not None and (recipe.source in ("price", "interaction") or recipe.lag):
        raise problem(
            "treatment_not_known",
            "deals",
            column=name,
            got="made of prices, of other variables or of the year before",
            expected="a feature that the deal list holds for every deal",
            remedy="Take [bounds] out, or ask about a feature of the list.",
        )
    raw, findings = raw_variables(listed, recipes, [name], {}, "deal_id", "deals")
    raise_errors(findings)
    return raw[name]


def _flag(listed: pd.DataFrame, flag: str) -> Floats:
    values = listed[flag].to_numpy(np.float64)
    other = ~np.isin(values, (0.0, 1.0))
    if other.any():
        named = ", ".join(listed.loc[other, "deal_id"].astype(str)[:5])
        raise problem(
            "flag_not_binary",
            "deals",
            column=flag,
            got=f"neither 0 nor 1 for {int(other.sum())} deals ({named})",
            expected="1 where the deal's outcome counts, 0 where it does not",
            remedy="Fill the column, or leave bounds.observed out.",
        )
    return values


def _refuse_one_sided(D: Floats, seen: Booleans, name: str) -> None:
    if len(np.unique(D[seen])) < 2:
        raise problem(
            "no_variation",
            "deals",
            column=name,
            got="the same value in every deal whose outcome is seen",
            expected="deals with the feature and without it",
            remedy="Take [bounds] out, or ask about another feature.",
        )


def _clusters(table: pd.DataFrame, names: Sequence[str]) -> dict[str, Integers]:
    """The first cluster dimension that every listed deal has."""
    for name in names:
        if name in table and not (table[name].isna() | (table[name].astype(str) == "")).any():
            return {name: codes(table[name])}
    return {}


def _cells(table: pd.DataFrame, names: Sequence[str]) -> Integers:
    if not names:
        return np.zeros(len(table), dtype=np.int64)
    joined = table[list(names)].astype(str).agg(" | ".join, axis=1)
    return codes(joined)
