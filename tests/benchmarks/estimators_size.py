"""Simulated size and coverage of the estimators, with Monte-Carlo standard errors.

Rerun with ``python -m tests.benchmarks.estimators_size`` from the project's top level; add
``--draws N`` for another number of draws a design. Writes
``tests/benchmarks/figures/estimators_size.json``. Same seed and draws, same figures. A few
minutes on one core at the default.

Each row is a rejection rate of a true null at a nominal 5%, that is one less the coverage of the
95% set. ``monte_carlo_se`` is √(p(1 - p)/draws) at the nominal rate, so a valid procedure lies
within about two of them of .05.
"""

from __future__ import annotations

import argparse
import json
from collections.abc import Callable, Iterable
from pathlib import Path

import numpy as np
from scipy.special import ndtr

from pipeline.core.design import Design, FitOptions, SelectionRows
from pipeline.core.estimate import Estimate
from pipeline.estimators.algebra import solve
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.least_squares import fixed_effects, ols
from pipeline.estimators.selection import heckman_two_step
from tests.benchmarks.draws import drawn, rejections

FIGURES = Path(__file__).parent / "figures" / "estimators_size.json"
TRUTH = 0.3
Outcome = dict[str, bool | float]


def design_of(y: np.ndarray, D: np.ndarray, controls: np.ndarray, **parts: object) -> Design:
    n = len(y)
    X = np.column_stack([np.ones(n), D, controls])
    names = ("constant", "treatment", *(f"control {at}" for at in range(controls.shape[1])))
    return Design(
        y=y,
        X=X,
        names=names,
        treatment="treatment",
        rows=tuple(map(str, range(n))),
        outcome="CAR",
        **parts,  # type: ignore[arg-type]
    )


def rejected(column: Estimate, truth: float = TRUTH) -> bool:
    low, high = column.intervals[column.names.index("treatment")]
    return not low <= truth <= high


def unequal_variances(rng: np.random.Generator) -> Outcome:
    """80 independent deals; a quarter treated, with three times the standard deviation."""
    D = (rng.random(80) < 0.25).astype(float)
    x = rng.normal(size=(80, 2))
    design = design_of(TRUTH * D + x[:, 0] + rng.normal(size=80) * (1 + 2 * D), D, x)
    return {
        kind: rejected(ols(design, FitOptions(covariance=kind)))
        for kind in ("classical", "hc1", "hc3")
    }


def clustered(groups: int, two_way: bool) -> Callable[[np.random.Generator], Outcome]:
    """240 deals of ``groups`` uneven acquirers in 6 industries; returns and treatment share shocks.

    Two-way: shocks by month too, as many months as acquirers.
    """

    def draw(rng: np.random.Generator) -> Outcome:
        n = 240
        firm = rng.choice(groups, size=n, p=rng.dirichlet(np.full(groups, 2.0)))
        month = rng.integers(0, groups, size=n)
        industry = rng.integers(0, 6, size=n)
        x = rng.normal(size=(n, 1))
        D = rng.normal(size=groups)[firm] + rng.normal(size=n)
        e = rng.normal(size=groups)[firm] + rng.normal(size=n)
        if two_way:
            D += rng.normal(size=groups)[month]
            e += rng.normal(size=groups)[month]
        y = TRUTH * D + x[:, 0] + 0.5 * industry + e
        clusters = {"acquirer": firm, **({"month": month} if two_way else {})}
        design = design_of(y, D, x, effects={"industry": industry}, clusters=clusters)
        column = fixed_effects(design, FitOptions())
        at = column.names.index("treatment")
        z = abs(column.coefficients[at] - TRUTH) / column.std_errors[at]
        return {
            "clustered, t": rejected(column),
            "clustered, normal (not offered)": bool(z > 1.959964),
            "hc1, clusters ignored": rejected(fixed_effects(design, FitOptions(covariance="hc1"))),
        }

    return draw


def candidates(rng: np.random.Generator) -> Design:
    """800 candidates, an excluded variable, correlation .6 between choice and return."""
    A = 800
    x, w = rng.normal(size=(2, A))
    v = rng.normal(size=A)
    u = 0.6 * v + 0.8 * rng.normal(size=A)
    selected = 0.2 + 0.5 * x + 0.8 * w + v > 0
    row = np.full(A, -1)
    row[selected] = np.arange(selected.sum())
    clusters = {"acquirer": np.arange(A) // 8}
    rows = SelectionRows(
        W=np.column_stack([np.ones(A), x, w]),
        names=("constant", "treatment", "wave"),
        excluded=("wave",),
        selected=selected,
        outcome_row=row,
        clusters=clusters,
    )
    y = (TRUTH * x + u)[selected]
    return design_of(y, x[selected], np.empty((len(y), 0)), selection=rows)


def selection(rng: np.random.Generator) -> Outcome:
    """Two-step errors: the corrected ones, the sandwich, and what least squares would print."""
    design = candidates(rng)
    column = heckman_two_step(design, FitOptions())
    rows = design.selection
    assert rows is not None
    index = rows.W[rows.selected] @ column.stages[0].coefficients
    ratio = np.exp(-0.5 * index**2) / np.sqrt(2 * np.pi)
    X = np.column_stack([design.X, ratio / ndtr(index)])
    b, e, bread = solve(X, design.y)
    naive = np.sqrt(e @ e / (len(e) - 3) * bread[1, 1])
    mills = column.term("inverse_mills")
    return {
        "two-step covariance": rejected(column),
        "sandwich": rejected(heckman_two_step(design, FitOptions(covariance="hc1"))),
        "clustered sandwich": rejected(heckman_two_step(design, FitOptions(cluster=True))),
        "second step alone (not offered)": bool(abs(b[1] - TRUTH) > 1.959964 * naive),
        "least squares on deals": rejected(ols(design, FitOptions())),
        "coefficient of the ratio": not mills["ci_low"] <= 0.6 <= mills["ci_high"],
        "_estimate": float(column.coefficients[1]),
        "_error": float(column.std_errors[1]),
    }


def instruments(
    strength: float, L: int, groups: int | None
) -> Callable[[np.random.Generator], Outcome]:
    """300 deals; choice and return share a correlation of .9; unequal variances.

    With ``groups`` acquirers all shocks and the instruments have a part common to the acquirer.
    """

    def draw(rng: np.random.Generator) -> Outcome:
        n = 300
        firm = rng.integers(0, groups, size=n) if groups else np.arange(n)

        def shock(*shape: int) -> np.ndarray:
            own = rng.normal(size=(n, *shape))
            if not groups:
                return own
            return np.asarray(np.sqrt(0.5) * (own + rng.normal(size=(groups, *shape))[firm]))

        Z = shock(L)
        v = shock()
        spread = np.exp(0.3 * Z[:, 0])
        u = spread * (0.9 * v + np.sqrt(1 - 0.81) * shock())
        D = strength * Z.sum(axis=1) + spread * v
        x = rng.normal(size=(n, 1))
        design = design_of(
            TRUTH * D + x[:, 0] + u,
            D,
            x,
            Z=Z,
            instruments=tuple(f"z{at}" for at in range(L)),
            clusters={"acquirer": firm} if groups else {},
        )
        column = two_stage_least_squares(design, FitOptions())
        found: Outcome = {
            "t interval": rejected(column),
            "headline set": not column.interval.covers(TRUTH),
            "_effective_f": column.tests["effective_f"].statistic,  # type: ignore[union-attr]
        }
        for key in ("anderson_rubin", "tf"):
            if key in column.sets:
                found[key] = not column.sets[key].covers(TRUTH)
        return found

    return draw


DESIGNS: dict[str, Callable[[np.random.Generator], Outcome]] = {
    "least squares, unequal variances, n = 80": unequal_variances,
    "fixed effects, 30 acquirers": clustered(30, two_way=False),
    "fixed effects, 8 acquirers": clustered(8, two_way=False),
    "fixed effects, 30 acquirers and 30 months": clustered(30, two_way=True),
    "selection, 800 candidates": selection,
    "one weak instrument": instruments(0.08, 1, None),
    "one strong instrument": instruments(0.8, 1, None),
    "one weak instrument, 40 acquirers": instruments(0.08, 1, 40),
    "three weak instruments": instruments(0.05, 3, None),
    "three strong instruments, 40 acquirers": instruments(0.5, 3, 40),
}


def measure(name: str, draws: int) -> list[dict[str, object]]:
    """One row a procedure of the design; rows of means for what starts with an underscore."""
    found = drawn(DESIGNS[name], (20260301, list(DESIGNS).index(name)), draws)
    return rejections(name, found, draws) + list(_means(name, found, draws))


def _means(name: str, found: dict[str, list[float]], draws: int) -> Iterable[dict[str, object]]:
    if "_effective_f" in found:
        median = float(np.median(found["_effective_f"]))
        yield {"design": name, "figure": "median effective F", "value": round(median, 2)}
    if "_error" in found:
        spread = float(np.std(found["_estimate"], ddof=1))
        ratio = float(np.mean(found["_error"])) / spread
        yield {
            "design": name,
            "figure": "mean reported error over the estimates' spread",
            "value": round(ratio, 4),
            "monte_carlo_se": round(ratio / np.sqrt(2 * draws), 4),
        }


def main() -> None:
    """Measure every design and write the figures."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--draws", type=int, default=4000)
    draws = parser.parse_args().draws
    rows = [row for name in DESIGNS for row in measure(name, draws)]
    FIGURES.parent.mkdir(exist_ok=True)
    FIGURES.write_text(json.dumps(rows, indent=1) + "\n", encoding="utf-8")
    for row in rows:
        print(" | ".join(str(value) for value in row.values()))


if __name__ == "__main__":
    main()
