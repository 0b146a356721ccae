"""From a deal table to the arrays of a regression: one sample, one mask, every loss noted."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from itertools import permutations

import numpy as np
import pandas as pd

from pipeline.characteristics.recipes import Recipe, finish, makeable, raw_variables
from pipeline.characteristics.universe import (
    Universe,
    codes,
    missing_controls,
    read_universe,
    selection_rows,
    without_exclusion,
)
from pipeline.core.design import Design, SelectionRows
from pipeline.core.findings import Finding, Severity, problem, raise_errors
from pipeline.core.ledger import Action, LedgerEntry, StageLedger
from pipeline.core.prices import Booleans, Floats, Integers, PricePanel

FEWEST_A_GROUP = 5
SHOWN = 5
MeasureFunction = Callable[..., Floats]


@dataclass(frozen=True, slots=True)
class Roles:
    """Which variable plays which part."""

    outcome: str
    outcome_label: str
    treatment: str
    continuous: bool = False
    controls: tuple[str, ...] = ()
    effects: tuple[str, ...] = ()
    clusters: tuple[str, ...] = ()
    instruments: tuple[str, ...] = ()
    also_endogenous: tuple[str, ...] = ()
    selection: tuple[str, ...] = ()
    excluded: tuple[str, ...] = ()

    @property
    def regressors(self) -> tuple[str, ...]:
        """Treatment and controls."""
        return (self.treatment, *self.controls)

    @property
    def numbers(self) -> tuple[str, ...]:
        """Every numeric variable of the outcome equation, once."""
        return tuple(dict.fromkeys([self.treatment, *self.controls, *self.instruments]))


@dataclass(frozen=True, slots=True, eq=False)
class Prepared:
    """A design with what was made on the way.

    ``deals`` holds the finished variables of all deals (NaN outside the regression rows) and
    ``in_regression``; ``groups`` the words behind the codes of each effect and cluster.
    """

    design: Design
    deals: pd.DataFrame
    ledger: StageLedger
    findings: tuple[Finding, ...]
    groups: Mapping[str, tuple[str, ...]]


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
            variation, a company control missing from the selection equation, a deal that is left
            without a cluster (``cluster_missing``).
    """
    raw, findings = raw_variables(
        deals, recipes, roles.numbers, measured, "deal_id", "deals", candidates
    )
    universe = None
    if candidates is not None and roles.selection:
        names = (*roles.selection, *roles.excluded)
        universe, more = read_universe(candidates, recipes, candidates_measured, names)
        findings += more + missing_controls(
            candidates, recipes, candidates_measured, roles.controls, roles.selection
        )
        findings += without_exclusion(roles.excluded)
    raise_errors(findings)
    used, ledger = _mask(deals, raw, roles, universe)
    finished = finish(makeable(recipes, raw), raw, used) if used.any() else dict(raw)
    _refuse_treatment(finished[roles.treatment][used], roles)
    _refuse_few(int(used.sum()), 1 + len(roles.regressors), ledger)
    selection = None
    if universe is not None:
        kept = tuple(deals.loc[used, "deal_id"].astype(str))
        selection, note = selection_rows(universe, recipes, kept, roles.excluded, roles.clusters)
        findings.append(note)
    design = _design(deals, finished, roles, used, selection)
    findings += nested_clusters(design.clusters)
    variables = {name: np.where(used, values, np.nan) for name, values in finished.items()}
    shown = [name for name in variables if name in recipes or name not in deals]
    table = deals.assign(
        **{name: variables[name] for name in shown}, in_regression=used.astype(np.int64)
    )
    groups = {name: words(deals.loc[used, name]) for name in (*roles.effects, *roles.clusters)}
    return Prepared(design, table, ledger, tuple(findings), groups)


def nested_clusters(clusters: Mapping[str, Integers]) -> list[Finding]:
    """A warning for a cluster dimension whose groups lie each within one group of the other."""
    findings = []
    for fine, coarse in permutations(clusters, 2):
        pairs = pd.DataFrame({"fine": clusters[fine], "coarse": clusters[coarse]})
        pairs = pairs.drop_duplicates()
        if pairs["fine"].is_unique and not pairs["coarse"].is_unique:
            findings.append(
                Finding(
                    "nested_clusters",
                    Severity.WARNING,
                    "study file",
                    got=f"each {fine} within one {coarse}",
                    expected="two dimensions that cut across each other",
                    remedy=f"Cluster by {coarse} alone: it allows for all that {fine} does.",
                    column="regression.clusters",
                )
            )
    return findings


def words(values: pd.Series) -> tuple[str, ...]:
    """The words behind a column's codes, in the order of the codes."""
    levels = pd.factorize(values, sort=True)[1]
    return tuple(f"{v:g}" if isinstance(v, float) else str(v) for v in levels)


def _mask(
    deals: pd.DataFrame,
    raw: Mapping[str, Floats],
    roles: Roles,
    universe: Universe | None,
) -> tuple[Booleans, StageLedger]:
    """Rows with every variable and effect, and (with a selection model) a candidate."""
    entries: list[LedgerEntry] = []
    ids = deals["deal_id"].astype(str).tolist()
    lacking: list[list[str]] = [[] for _ in ids]
    for name, values in raw.items():
        for row in np.flatnonzero(~np.isfinite(values)):
            lacking[row].append(name)
    for name in roles.effects:
        for row in np.flatnonzero(_empty(deals[name])):
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
    for alone, effect in _singletons(deals, roles.effects, used):
        used[alone] = False
        value = f"alone in {effect} {deals[effect].iloc[alone]}"
        entries.append(_drop(ids[alone], "singleton", value, "two deals a group"))
    _refuse_without_cluster(deals[used], roles.clusters)
    return used, StageLedger("regression", len(deals), tuple(entries))


def _empty(values: pd.Series) -> Booleans:
    return (values.isna() | (values.astype(str) == "")).to_numpy(dtype=np.bool_)


def _refuse_without_cluster(kept: pd.DataFrame, clusters: Sequence[str]) -> None:
    """Every deal left for the regression must say with which others it shares shocks.

    Leaving it out would choose the sample by a gap in the records, and a group of its own would
    claim that it moves with no other deal.
    """
    findings = []
    for name in clusters:
        lost = kept[_empty(kept[name])]
        if len(lost):
            deals = lost["deal_id"].astype(str).tolist()
            more = f" and {len(deals) - SHOWN} more" if len(deals) > SHOWN else ""
            findings.append(
                Finding(
                    "cluster_missing",
                    Severity.ERROR,
                    "deals",
                    got=f"no {name} for {', '.join(deals[:SHOWN])}{more}",
                    expected="a group for every deal of the regression",
                    remedy="Fill the cells, delete those rows, or choose another cluster.",
                    rows=tuple(int(row) for row in lost.get("_row", ())),
                    column=name,
                )
            )
    raise_errors(findings)


def _singletons(
    deals: pd.DataFrame, effects: Sequence[str], used: Booleans
) -> Iterator[tuple[int, str]]:
    """Rows alone in a group of a fixed effect, until no group of one is left.

    They fit themselves and leave every column, so that all columns stand on the same rows.
    """
    left = used.copy()
    found = True
    while found:
        found = False
        for name in effects:
            values = deals[name].where(left)
            alone = left & values.map(values.value_counts()).eq(1).to_numpy()
            for row in np.flatnonzero(alone):
                left[row] = False
                found = True
                yield int(row), name


def _drop(deal: str, rule: str, value: str, threshold: str) -> LedgerEntry:
    return LedgerEntry(deal, rule, Action.DROPPED, value, threshold)


def _refuse_treatment(treatment: Floats, roles: Roles) -> None:
    values, counts = np.unique(treatment, return_counts=True)
    yes_or_no = set(values) <= {0.0, 1.0}
    if len(values) > 1 and not yes_or_no and not roles.continuous:
        raise problem(
            "treatment_not_binary",
            "deals",
            column=roles.treatment,
            got=", ".join(f"{value:g}" for value in values[:5]),
            expected="0 or 1 in every row",
            remedy="Make an indicator under [characteristics], or set regression.continuous = true "
            "if the feature is a degree.",
        )
    if len(values) > 1 and (not yes_or_no or counts.min() >= FEWEST_A_GROUP):
        return
    found = ", ".join(f"{n} deals with {v:g}" for v, n in zip(values, counts, strict=True))
    raise problem(
        "no_variation",
        "deals",
        column=roles.treatment,
        got=found or "no deal left for the regression",
        expected=f"at least {FEWEST_A_GROUP} deals with each of two values",
        remedy="Widen the sample, or ask about another feature; the ledger says what was lost.",
    )


def _refuse_few(rows: int, coefficients: int, ledger: StageLedger) -> None:
    """At least 10 + 5 k deals for k coefficients: common practice, no source."""
    needed = 10 + 5 * coefficients
    if rows >= needed:
        return
    raise problem(
        "few_rows",
        "deals",
        got=f"{rows} deals ({ledger.rows_in} were measured) for {coefficients} coefficients",
        expected=f"at least {needed} deals",
        remedy="Take controls out, widen the sample, or delete [regression] and test the mean.",
    )


def _design(
    deals: pd.DataFrame,
    finished: Mapping[str, Floats],
    roles: Roles,
    used: Booleans,
    selection: SelectionRows | None,
) -> Design:
    kept = deals[used]
    regressors = roles.regressors
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
        outcome_variance=_outcome_variance(kept, roles.outcome),
        also_endogenous=roles.also_endogenous,
    )


def _outcome_variance(kept: pd.DataFrame, outcome: str) -> Floats | None:
    """(n,) squares of the column ``<outcome>_std_dev``; None unless every deal has one."""
    column = f"{outcome}_std_dev"
    if column not in kept:
        return None
    spread = pd.to_numeric(kept[column], errors="coerce").to_numpy(np.float64)
    return np.asarray(spread**2) if np.isfinite(spread).all() else None
