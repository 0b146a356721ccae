"""From a deal table to the arrays of a regression: one sample, one mask, every loss noted."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd

from pipeline.characteristics.recipes import Recipe, finish, makeable, raw_variables
from pipeline.characteristics.universe import (
    Universe,
    codes,
    missing_controls,
    read_universe,
    selection_rows,
)
from pipeline.core.design import Design, SelectionRows
from pipeline.core.findings import Finding, problem, raise_errors
from pipeline.core.ledger import Action, LedgerEntry, StageLedger
from pipeline.core.prices import Booleans, Floats, PricePanel

FEWEST_A_GROUP = 5
MeasureFunction = Callable[..., Floats]


@dataclass(frozen=True, slots=True)
class Roles:
    """Which variable plays which part."""

    outcome: str
    outcome_label: str
    treatment: str
    controls: tuple[str, ...] = ()
    effects: tuple[str, ...] = ()
    clusters: tuple[str, ...] = ()
    instruments: tuple[str, ...] = ()
    selection: tuple[str, ...] = ()
    excluded: tuple[str, ...] = ()

    @property
    def numbers(self) -> tuple[str, ...]:
        """Every numeric variable of the outcome equation, once."""
        return tuple(dict.fromkeys([self.treatment, *self.controls, *self.instruments]))


@dataclass(frozen=True, slots=True, eq=False)
class Prepared:
    """A design with what was made on the way.

    ``deals`` holds the finished variables of all deals (NaN outside the regression rows) and
    ``in_regression``.
    """

    design: Design
    deals: pd.DataFrame
    ledger: StageLedger
    findings: tuple[Finding, ...]


def price_measures(
    recipes: Sequence[Recipe],
    table: pd.DataFrame,
    panels: Mapping[str, PricePanel],
    functions: Mapping[str, MeasureFunction],
) -> dict[str, Floats]:
    """(n,) values of every price recipe for rows with ``exchange``, ``column``, ``position``.

    Rows whose column is -1 (no prices) get NaN.
    """
    made: dict[str, Floats] = {}
    exchanges = table["exchange"].to_numpy()
    column, position = table["column"].to_numpy(), table["position"].to_numpy()
    for recipe in recipes:
        if recipe.source != "price" or recipe.window is None:
            continue
        values = np.full(len(table), np.nan)
        for exchange, panel in panels.items():
            here = (exchanges == exchange) & (column >= 0)
            if here.any():
                values[here] = functions[recipe.measure](
                    panel, column[here], position[here], recipe.window
                )
        made[recipe.name] = values
    return made


def prepare(
    deals: pd.DataFrame,
    candidates: pd.DataFrame | None,
    recipes: Mapping[str, Recipe],
    measured: Mapping[str, Floats],
    candidates_measured: Mapping[str, Floats],
    roles: Roles,
) -> Prepared:
    """Make every variable, mark the rows all columns share, and lay the arrays.

    Args:
        deals: one row a measured deal, with the outcome column ``roles.outcome``.
        candidates: the company-years, or None without a selection model.
        recipes: variable -> recipe.
        measured, candidates_measured: price measures of deals and candidates.
        roles: which variable plays which part.

    Raises:
        InputProblem: a variable nothing defines, an impossible transform, a treatment without
            variation, a company control missing from the selection equation.
    """
    raw, findings = raw_variables(deals, recipes, roles.numbers, measured, "deal_id", "deals")
    universe = None
    if candidates is not None and roles.selection:
        names = (*roles.selection, *roles.excluded)
        universe, more = read_universe(candidates, recipes, candidates_measured, names)
        findings += more + missing_controls(candidates, roles.controls, roles.selection)
    raise_errors(findings)
    used, ledger = _mask(deals, raw, roles, universe)
    finished = finish(makeable(recipes, raw), raw, used) if used.any() else dict(raw)
    _refuse_without_variation(finished[roles.treatment][used], roles.treatment)
    selection = None
    if universe is not None:
        kept = tuple(deals.loc[used, "deal_id"].astype(str))
        selection, note = selection_rows(universe, recipes, kept, roles.excluded, roles.clusters)
        findings.append(note)
    design = _design(deals, finished, roles, used, selection)
    variables = {name: np.where(used, values, np.nan) for name, values in finished.items()}
    shown = [name for name in variables if name in recipes or name not in deals]
    table = deals.assign(
        **{name: variables[name] for name in shown}, in_regression=used.astype(np.int64)
    )
    return Prepared(design, table, ledger, tuple(findings))


def _mask(
    deals: pd.DataFrame,
    raw: Mapping[str, Floats],
    roles: Roles,
    universe: Universe | None,
) -> tuple[Booleans, StageLedger]:
    """Rows with every variable, effect and cluster, and (with a selection model) a candidate."""
    entries: list[LedgerEntry] = []
    ids = deals["deal_id"].astype(str).tolist()
    lacking: list[list[str]] = [[] for _ in ids]
    for name, values in raw.items():
        for row in np.flatnonzero(~np.isfinite(values)):
            lacking[row].append(name)
    for name in (*roles.effects, *roles.clusters):
        empty = (deals[name].isna() | (deals[name].astype(str) == "")).to_numpy()
        for row in np.flatnonzero(empty):
            lacking[row].append(name)
    used = np.array([not names for names in lacking], dtype=np.bool_)
    for deal, names in zip(ids, lacking, strict=True):
        if names:
            value = ", ".join(dict.fromkeys(names))
            entries.append(_drop(deal, "missing_characteristic", value, "a value of each variable"))
    if universe is not None:
        for row in np.flatnonzero(used):
            security, year = str(deals["security"].iloc[row]), float(deals["year"].iloc[row])
            verdict = universe.verdict(ids[row], security, year)
            if verdict is not None:
                used[row] = False
                entries.append(_drop(ids[row], *verdict))
    return used, StageLedger("regression", len(deals), tuple(entries))


def _drop(deal: str, rule: str, value: str, threshold: str) -> LedgerEntry:
    return LedgerEntry(deal, rule, Action.DROPPED, value, threshold)


def _refuse_without_variation(treatment: Floats, name: str) -> None:
    values, counts = np.unique(treatment, return_counts=True)
    if len(values) > 1 and (len(values) > 2 or counts.min() >= FEWEST_A_GROUP):
        return
    found = ", ".join(f"{n} deals with {v:g}" for v, n in zip(values, counts, strict=True))
    raise problem(
        "no_variation",
        "deals",
        column=name,
        got=found or "no deal left for the regression",
        expected=f"at least {FEWEST_A_GROUP} deals with each of two values",
        remedy="Widen the sample, or ask about another feature; the ledger says what was lost.",
    )


def _design(
    deals: pd.DataFrame,
    finished: Mapping[str, Floats],
    roles: Roles,
    used: Booleans,
    selection: SelectionRows | None,
) -> Design:
    kept = deals[used]
    regressors = [roles.treatment, *roles.controls]
    columns = [np.ones(int(used.sum()))] + [finished[name][used] for name in regressors]
    instruments = [finished[name][used] for name in roles.instruments]
    return Design(
        y=kept[roles.outcome].to_numpy(np.float64),
        X=np.column_stack(columns),
        names=("constant", *regressors),
        treatment=roles.treatment,
        rows=tuple(kept["deal_id"].astype(str)),
        outcome=roles.outcome_label,
        effects={name: codes(kept[name]) for name in roles.effects},
        clusters={name: codes(kept[name]) for name in roles.clusters},
        Z=np.column_stack(instruments) if instruments else np.empty((len(kept), 0)),
        instruments=roles.instruments,
        selection=selection,
    )
