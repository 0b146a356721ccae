"""Declarative transforms: a variable is one source and a few steps, never code."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd

from pipeline.core.findings import Finding, Severity
from pipeline.core.prices import Booleans, Floats
from pipeline.core.window import Window


@dataclass(frozen=True, slots=True)
class Recipe:
    """How one variable is made.

    Attributes:
        name: the variable.
        source: ``column``, ``ratio``, ``interaction``, ``indicator`` or ``price``.
        columns: what the source reads: one column, two for a ratio or an interaction, none for
            a price measure.
        equals, above: the condition of an indicator.
        measure, window: of a price measure.
        lag: years back, for candidate tables.
        log, winsorise, standardise: the steps, in this order.
    """

    name: str
    source: str
    columns: tuple[str, ...] = ()
    equals: str | float | None = None
    above: float | None = None
    measure: str = ""
    window: Window | None = None
    lag: int = 0
    log: bool = False
    winsorise: float = 0.0
    standardise: bool = False


def raw_values(
    recipe: Recipe,
    table: pd.DataFrame,
    measured: Mapping[str, Floats],
    history: pd.DataFrame | None = None,
) -> Floats:
    """(n,) values after source, lag and log; NaN where an input is missing.

    Args:
        recipe: anything but an interaction, which is made of finished variables.
        table: the rows, with the recipe's columns; a lag needs ``security`` and ``year``.
        measured: price measures by variable name.
        history: the candidates, one row a ``security`` and ``year``, for lags.
    """
    if recipe.source == "price":
        values = measured[recipe.name]
    elif recipe.source == "ratio":
        over, under = (table[name].to_numpy(np.float64) for name in recipe.columns)
        with np.errstate(divide="ignore", invalid="ignore"):
            values = over / under
    elif recipe.source == "indicator":
        values = _indicator(recipe, table[recipe.columns[0]])
    else:
        values = table[recipe.columns[0]].to_numpy(np.float64)
    if recipe.lag and history is not None:
        values = _lagged(recipe, table, history)
    if recipe.log:
        with np.errstate(divide="ignore", invalid="ignore"):
            values = np.log(values)
    return np.asarray(values, dtype=np.float64)


def _indicator(recipe: Recipe, column: pd.Series) -> Floats:
    missing = column.isna() | (column.astype(str) == "")
    if recipe.above is not None:
        hit = column.to_numpy(np.float64) > recipe.above
    else:
        hit = (column == recipe.equals).to_numpy()
    return np.where(missing, np.nan, hit.astype(np.float64))


def _lagged(recipe: Recipe, table: pd.DataFrame, history: pd.DataFrame) -> Floats:
    """The candidate's value ``lag`` years before each row's year; NaN where there is none."""
    column = recipe.columns[0]
    known = history[["security", "year", column]].rename(columns={column: "_value"})
    keys = table[["security", "year"]].assign(year=table["year"] - recipe.lag)
    joined = keys.merge(known, on=["security", "year"], how="left", validate="m:1")
    return joined["_value"].to_numpy(np.float64)


def finish(
    recipes: Sequence[Recipe], raw: Mapping[str, Floats], used: Booleans
) -> dict[str, Floats]:
    """Winsorise and standardise on the rows used, then build interactions of the results.

    Args:
        recipes: every variable, interactions after what they multiply.
        raw: (n,) values of the others, and of plain columns that interactions name.
        used: (n,) the rows of the regression; quantiles and moments are theirs alone.
    """
    done: dict[str, Floats] = dict(raw)
    for recipe in recipes:
        if recipe.source == "interaction":
            first, second = recipe.columns
            values = done[first] * done[second]
        else:
            values = done[recipe.name].copy()
        if recipe.winsorise:
            values = winsorised(values, used, recipe.winsorise)
        if recipe.standardise:
            own = values[used]
            values = (values - own.mean()) / own.std(ddof=1)
        done[recipe.name] = values
    return done


def winsorised(values: Floats, used: Booleans, share: float) -> Floats:
    """Values below the ``share`` quantile of the used rows, or above the mirror one, set to it."""
    low, high = np.quantile(values[used], [share, 1 - share])
    return np.clip(values, low, high)


def ordered(recipes: Mapping[str, Recipe]) -> list[Recipe]:
    """Interactions after the variables they multiply.

    Raises:
        ValueError: if interactions refer to one another in a circle.
    """
    done: list[Recipe] = [r for r in recipes.values() if r.source != "interaction"]
    waiting = [r for r in recipes.values() if r.source == "interaction"]
    while waiting:
        names = {recipe.name for recipe in waiting}
        ready = [r for r in waiting if not names.intersection(r.columns)]
        if not ready:
            raise ValueError(f"interactions in a circle: {', '.join(sorted(names))}")
        done += ready
        waiting = [recipe for recipe in waiting if recipe not in ready]
    return done


def impossible(
    recipe: Recipe, table: pd.DataFrame, values: Floats, key: str, file: str
) -> list[Finding]:
    """An error when a log or ratio has no finite value although its inputs are filled."""
    if recipe.source in ("price", "indicator") or not recipe.columns:
        return []
    inputs = table[list(recipe.columns)]
    filled = inputs.notna().all(axis=1).to_numpy() if not recipe.lag else np.zeros(len(table), bool)
    broken = table.loc[filled & ~np.isfinite(values), key].astype(str)
    if broken.empty:
        return []
    shown = ", ".join(broken[:5]) + (f" and {len(broken) - 5} more" if len(broken) > 5 else "")
    return [
        Finding(
            "transform_impossible",
            Severity.ERROR,
            file,
            got=f"no finite value for {shown}",
            expected="values above zero for a log, and no division by zero",
            remedy=f"Correct the cells of {' and '.join(recipe.columns)}, or leave the step out.",
            column=f"characteristics.{recipe.name}",
        )
    ]


def needed(names: Sequence[str], recipes: Mapping[str, Recipe]) -> list[str]:
    """The names and, for interactions, what they multiply; once each."""
    out: list[str] = []
    for name in names:
        recipe = recipes.get(name)
        if recipe is not None and recipe.source == "interaction":
            out += needed(recipe.columns, recipes)
        out.append(name)
    return list(dict.fromkeys(out))


def makeable(recipes: Mapping[str, Recipe], raw: Mapping[str, Floats]) -> list[Recipe]:
    """The recipes that ``raw`` suffices for, interactions last."""
    have = set(raw)
    chosen: list[Recipe] = []
    for recipe in ordered(recipes):
        if recipe.name in have or (
            recipe.source == "interaction" and have.issuperset(recipe.columns)
        ):
            chosen.append(recipe)
            have.add(recipe.name)
    return chosen


def raw_variables(
    table: pd.DataFrame,
    recipes: Mapping[str, Recipe],
    names: Sequence[str],
    measured: Mapping[str, Floats],
    key: str,
    file: str,
    history: pd.DataFrame | None = None,
) -> tuple[dict[str, Floats], list[Finding]]:
    """Raw values of all names but interactions, and a finding for each that cannot be made."""
    raw: dict[str, Floats] = {}
    findings: list[Finding] = []
    for name in needed(names, recipes):
        recipe = recipes.get(name) or Recipe(name, "column", (name,))
        if recipe.source == "interaction":
            continue
        if recipe.lag and history is None:
            findings.append(_no_history(recipe))
            continue
        where = table if not recipe.lag or history is None else history
        lacking = [column for column in recipe.columns if column not in where.columns]
        if lacking:
            findings.append(_unknown(name, lacking, file))
            continue
        raw[name] = raw_values(recipe, table, measured, history)
        findings += impossible(recipe, table, raw[name], key, file)
    return raw, findings


def _no_history(recipe: Recipe) -> Finding:
    return Finding(
        "lag_without_history",
        Severity.ERROR,
        "study",
        got=f"a lag (in years: {recipe.lag}), and no table of candidates",
        expected="candidates, company by year",
        remedy="Name the candidates in a study with [selection], or leave the lag out.",
        column=f"characteristics.{recipe.name}.lag",
    )


def _unknown(name: str, lacking: list[str], file: str) -> Finding:
    return Finding(
        "unknown_variable",
        Severity.ERROR,
        file,
        got=f"nothing called {', '.join(lacking)}",
        expected=f"a numeric column of {file}, or an entry under [characteristics]",
        remedy="Correct the name, or define it under [characteristics].",
        column=name,
    )
