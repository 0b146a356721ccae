"""The companies that could have announced: rows of the selection equation."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd

from pipeline.characteristics.recipes import Recipe, finish, makeable, raw_variables
from pipeline.core.design import SelectionRows
from pipeline.core.findings import Finding, Severity
from pipeline.core.prices import Booleans, Floats, Integers


@dataclass(frozen=True, slots=True, eq=False)
class Universe:
    """Candidates with their raw variables.

    Attributes:
        table: security, exchange, year, deal_id ('' if none) and more; A rows.
        names: the variables of the selection equation.
        raw: variable -> (A,) values before winsorising.
        complete: (A,) whether every variable is finite.
    """

    table: pd.DataFrame
    names: tuple[str, ...]
    raw: Mapping[str, Floats]
    complete: Booleans

    def verdict(self, deal: str, security: str, year: float) -> tuple[str, str, str] | None:
        """None if the deal has a complete candidate row; else rule, value and threshold."""
        rows = np.flatnonzero((self.table["deal_id"] == deal).to_numpy())
        if rows.size and self.complete[rows[0]]:
            return None
        if rows.size:
            return "missing_characteristic", "candidate row has gaps", "a value of each variable"
        same = (self.table["security"] == security) & (self.table["year"] == year)
        if same.any():
            other = str(self.table.loc[same, "deal_id"].iloc[0]) or "no deal"
            return "second_in_year", f"its company-year stands for {other}", "one deal a row"
        return "candidate_missing", f"{security} in {year:.0f}", "a candidate row"


def read_universe(
    table: pd.DataFrame,
    recipes: Mapping[str, Recipe],
    measured: Mapping[str, Floats],
    names: Sequence[str],
) -> tuple[Universe, list[Finding]]:
    """The candidates' raw variables, and a finding for each that cannot be made."""
    raw, findings = raw_variables(table, recipes, names, measured, "security", "candidates", table)
    values = np.column_stack(list(raw.values())) if raw else np.ones((len(table), 1))
    complete = np.asarray(np.isfinite(values).all(axis=1), dtype=np.bool_)
    return Universe(table, tuple(names), raw, complete), findings


def selection_rows(
    universe: Universe,
    recipes: Mapping[str, Recipe],
    deals: Sequence[str],
    excluded: tuple[str, ...],
    clusters: Sequence[str],
) -> tuple[SelectionRows, Finding]:
    """The candidates' arrays for the deals kept, and a note of how many candidates entered.

    Candidates with a gap leave, and so do those whose deal was lost on the way: they announced,
    and their reaction is unknown.
    """
    table = universe.table
    row_of = {deal: row for row, deal in enumerate(deals)}
    outcome = table["deal_id"].map(row_of).fillna(-1).to_numpy().astype(np.int64)
    lost = (table["deal_id"] != "").to_numpy() & (outcome < 0)
    keep = universe.complete & ~lost
    finished = finish(makeable(recipes, universe.raw), universe.raw, keep)
    columns = [np.ones(int(keep.sum()))] + [finished[name][keep] for name in universe.names]
    rows = SelectionRows(
        W=np.column_stack(columns),
        names=("constant", *universe.names),
        excluded=excluded,
        selected=outcome[keep] >= 0,
        outcome_row=outcome[keep],
        clusters={name: codes(table[name][keep]) for name in clusters if name in table},
    )
    gaps = int((~universe.complete).sum())
    note = Finding(
        "candidates_used",
        Severity.NOTE,
        "candidates",
        got=f"{int(keep.sum())} of {len(table)} company-years enter the selection equation",
        expected=f"{gaps} lack a variable, {int((lost & universe.complete).sum())} announced a "
        "deal that was not measured",
        remedy="None needed.",
    )
    return rows, note


def codes(values: pd.Series) -> Integers:
    """(n,) integer codes from 0, in the sorted order of the values."""
    return np.asarray(pd.factorize(values, sort=True)[0], dtype=np.int64)


def without_exclusion(excluded: Sequence[str]) -> list[Finding]:
    """A warning where no variable moves the decision to bid alone."""
    if excluded:
        return []
    return [
        Finding(
            "no_exclusion",
            Severity.WARNING,
            "study",
            got="no variable moves the decision to bid alone: the selection model leans on the "
            "shape of the normal curve",
            expected="at least one variable in selection.excluded",
            remedy="Name one and say why it does not move the return; the column does not lead.",
            column="selection.excluded",
        )
    ]


def missing_controls(
    candidates: pd.DataFrame,
    recipes: Mapping[str, Recipe],
    measured: Mapping[str, Floats],
    controls: Sequence[str],
    selection: Sequence[str],
) -> list[Finding]:
    """An error for each company variable of the outcome that the selection equation lacks.

    A variable is the company's if the candidates hold all its columns, or if it is made of their
    prices.
    """
    return [
        Finding(
            "selection_lacks_control",
            Severity.ERROR,
            "study",
            got=f"'{name}' explains the outcome and not the decision to bid",
            expected="company variables of the outcome in selection.explained_by too",
            remedy=f"Add '{name}' to selection.explained_by.",
            column="selection.explained_by",
        )
        for name in controls
        if name not in selection and _of_company(name, candidates, recipes, measured)
    ]


def _of_company(
    name: str,
    candidates: pd.DataFrame,
    recipes: Mapping[str, Recipe],
    measured: Mapping[str, Floats],
) -> bool:
    recipe = recipes.get(name) or Recipe(name, "column", (name,))
    if recipe.source == "price" and name in measured:
        return bool(np.isfinite(measured[name]).any())
    columns = recipe.columns or (name,)
    return all(part in candidates and candidates[part].notna().any() for part in columns)
