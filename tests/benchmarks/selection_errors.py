"""Errors of the selection family against the spread over simulated samples, and coverage.

Rerun with ``python -m tests.benchmarks.selection_errors`` from the project's top level; add
``--draws N`` for another number of samples a design. Writes
``tests/benchmarks/figures/selection_errors.json``. Same seed and draws, same figures. Some minutes
on one core at the default.

``spread`` is the standard deviation of the estimate over samples, known to ``spread_se``;
``mean_error`` the average of the printed standard errors and ``ratio`` one over the other, so
that 1 is right and below 1 too small. ``coverage`` is the share of 95% sets that hold the truth,
known to ``coverage_se``. ``withheld`` is the share of samples that gave no number.
"""

from __future__ import annotations

import argparse
import json
from collections.abc import Callable
from pathlib import Path

import numpy as np
from scipy.special import ndtr

from pipeline.core.design import Design, FitOptions, SelectionRows
from pipeline.core.estimate import Estimate, EstimationFailed
from pipeline.estimators.bounds import imbens_manski
from pipeline.estimators.bounds_in_cells import Listed, range_of, redrawn
from pipeline.estimators.errors import ErrorRule
from pipeline.estimators.expected_gain import foreseen_gain, private_terms
from pipeline.estimators.probit import Equation, fit_probit
from pipeline.estimators.selection import heckman_two_step
from pipeline.estimators.selection_bootstrap import bootstrap_both_steps
from pipeline.estimators.selection_controls import controlled, powers, straight_line
from pipeline.estimators.selection_ml import heckman_likelihood
from tests.benchmarks.draws import drawn

FIGURES = Path(__file__).parent / "figures" / "selection_errors.json"
TRUTH, RATIO, REPLICATIONS = 0.3, 0.6, 199
NORMAL = 1.959964
GAMMA, OMEGA = np.array([0.010, 0.030]), 0.02
Sample = dict[str, tuple[float, float, float, bool]]
"""Procedure -> estimate, standard error, truth, whether its set holds the truth."""


def candidates(rng: np.random.Generator, *, excluded: bool, shared: bool) -> Design:
    """800 candidates in 100 companies, correlation .6 of the errors of choice and return.

    ``excluded``: whether a variable moves announcing alone; ``shared``: whether half of the
    variance of both errors is common to a company's candidates.
    """
    A, groups = 800, 100
    firm = np.repeat(np.arange(groups), A // groups)
    x, w = rng.normal(size=(2, A))
    v, e = rng.normal(size=(2, A))
    if shared:
        x = (x + rng.normal(size=groups)[firm]) / np.sqrt(2)
        v = (v + rng.normal(size=groups)[firm]) / np.sqrt(2)
        e = (e + rng.normal(size=groups)[firm]) / np.sqrt(2)
    seen = 0.2 + 0.5 * x + 0.8 * w * excluded + v > 0
    row = np.full(A, -1)
    row[seen] = np.arange(seen.sum())
    columns, names = [np.ones(A), x], ["constant", "treatment"]
    if excluded:
        columns, names = [*columns, w], [*names, "wave"]
    rows = SelectionRows(
        np.column_stack(columns), tuple(names), ("wave",) if excluded else (), seen, row,
        {"company": firm},
    )  # fmt: skip
    y = (TRUTH * x + RATIO * v + 0.8 * e)[seen]
    n = len(y)
    return Design(
        y=y,
        X=np.column_stack([np.ones(n), x[seen]]),
        names=("constant", "treatment"),
        treatment="treatment",
        rows=tuple(map(str, range(n))),
        outcome="CAR",
        selection=rows,
    )


def of_column(column: Estimate) -> tuple[float, float, float, bool]:
    at = column.names.index("treatment")
    low, high = column.intervals[at]
    held = bool(low <= TRUTH <= high)
    return float(column.coefficients[at]), float(column.std_errors[at]), TRUTH, held


def both_steps(*, excluded: bool, shared: bool) -> Callable[[np.random.Generator], Sample]:
    """The treatment's coefficient under each kind of error, and by likelihood."""

    def draw(rng: np.random.Generator) -> Sample:
        design = candidates(rng, excluded=excluded, shared=shared)
        rows = design.selection
        assert rows is not None
        kinds = {
            "two steps, corrected formula": FitOptions(covariance="classical"),
            "two steps, stacked moments": FitOptions(covariance="hc1"),
            "two steps, clustered": FitOptions(cluster=True),
        }
        found: Sample = {}
        for name, options in kinds.items():
            try:
                found[name] = of_column(heckman_two_step(design, options))
            except EstimationFailed:
                continue
        if "two steps, stacked moments" in found:
            found["two steps, bootstrap"] = _bootstrap(design, rows, rng)
        for name, options in (
            ("likelihood", FitOptions()),
            ("likelihood, clustered", FitOptions(cluster=True)),
        ):
            try:
                found[name] = of_column(heckman_likelihood(design, options))
            except EstimationFailed:
                continue
        return {**found, **_others(design, rows)}

    return draw


def _bootstrap(
    design: Design, rows: SelectionRows, rng: np.random.Generator
) -> tuple[float, float, float, bool]:
    equation = Equation(rows.selected, rows.W, rows.names, "announcing", rows.names[-1])
    first = fit_probit(equation)
    seed = int(rng.integers(2**31))
    drawn = bootstrap_both_steps(design, rows, first, equation, REPLICATIONS, seed)
    low, high = drawn.intervals(0.95)[1]
    return float(drawn.point[1]), float(drawn.errors()[1]), TRUTH, bool(low <= TRUTH <= high)


def _others(design: Design, rows: SelectionRows) -> Sample:
    """A straight line and powers of the index; only with an excluded variable."""
    if not rows.excluded:
        return {}
    equation = Equation(rows.selected, rows.W, rows.names, "announcing", rows.names[-1])
    rule = ErrorRule("cluster", dict(rows.clusters), len(rows.selected))
    controls = {
        "straight line, clustered": straight_line(rows),
        "powers of the index to 2, clustered": powers(rows, fit_probit(equation), 2),
    }
    found: Sample = {}
    for name, control in controls.items():
        _, b, V = controlled(design, rows, control, rule)
        error = float(np.sqrt(V[1, 1]))
        found[name] = (float(b[1]), error, TRUTH, abs(b[1] - TRUTH) <= NORMAL * error)
    return found


def foreseen(rng: np.random.Generator) -> Sample:
    """6,000 companies that announce when the gain is positive; about two thirds do."""
    n = 6000
    X = np.column_stack([np.ones(n), rng.normal(size=n)])
    a = X @ GAMMA / OMEGA
    gain = OMEGA * (a + rng.normal(size=n))
    held = OMEGA * (a * ndtr(a) + np.exp(-0.5 * a**2) / np.sqrt(2 * np.pi))
    y = gain - held + 0.004 * rng.normal(size=n)
    seen = gain > 0
    try:
        fit = foreseen_gain(y[seen], X[seen])
    except EstimationFailed:
        return {}
    errors = np.sqrt((fit.influence**2).sum(axis=0))
    values, truths = np.append(fit.gamma, fit.omega), np.append(GAMMA, OMEGA)
    names = ("foreseen gain, constant", "foreseen gain, slope", "foreseen gain, omega")
    return {
        name: (float(v), float(e), float(t), bool(abs(v - t) <= NORMAL * e))
        for name, v, e, t in zip(names, values, errors, truths, strict=True)
    }


def private(rng: np.random.Generator) -> Sample:
    """The news of 800 candidates: π is .6 and there is no constant."""
    design = candidates(rng, excluded=True, shared=False)
    rows = design.selection
    assert rows is not None
    news = design.y - TRUTH * design.X[:, 1]
    part = Design(
        y=news, X=design.X, names=design.names, treatment="treatment", rows=design.rows,
        outcome="CAR", selection=rows,
    )  # fmt: skip
    term = private_terms(part, FitOptions())[0]
    held = term.ci_low <= RATIO <= term.ci_high
    return {"private news": (term.estimate, term.std_error, RATIO, bool(held))}


def bounded(rng: np.random.Generator) -> Sample:
    """600 deals in 3 cells; those seen only with the treatment are the highest of each cell.

    Setting the highest aside is then exactly right: the truth is the lower bound.
    """
    A = 600
    cells = rng.integers(0, 3, size=A)
    base = rng.normal(size=A)
    D = rng.random(A) < 0.5
    willing = rng.random(A) < 0.85
    seen = willing & (D | (base < 0.8416212335729143))
    rows = Listed(TRUTH * D + base + cells, D, seen, cells, np.arange(A))
    found = range_of(rows)
    errors = redrawn(rows, REPLICATIONS, int(rng.integers(2**31))).std(axis=0, ddof=1)
    low, high = imbens_manski(found.lower, found.upper, float(errors[0]), float(errors[1]), 0.95)
    held = low <= TRUTH <= high
    return {"bounds in cells, lower": (found.lower, float(errors[0]), TRUTH, bool(held))}


DESIGNS: dict[str, tuple[Callable[[np.random.Generator], Sample], float]] = {
    "an excluded variable": (both_steps(excluded=True, shared=False), 1),
    "an excluded variable, errors shared in companies": (both_steps(excluded=True, shared=True), 1),
    "no excluded variable": (both_steps(excluded=False, shared=False), 0.5),
    "gain foreseen by investors": (foreseen, 1),
    "private news": (private, 1),
    "bounds, truth at the lower one": (bounded, 1),
}
"""Name -> (one sample, how many times the samples asked for)."""


def measure(name: str, draws: int) -> list[dict[str, object]]:
    """One row a procedure of the design."""
    draw, times = DESIGNS[name]
    draws = round(draws * times)
    found = drawn(draw, (20260304, list(DESIGNS).index(name)), draws)
    return [_row(name, procedure, np.array(rows), draws) for procedure, rows in found.items()]


def _row(name: str, procedure: str, rows: np.ndarray, draws: int) -> dict[str, object]:
    estimate, error, truth, held = rows.T
    n = len(rows)
    spread = float(estimate.std(ddof=1))
    # The spread of a spread, by the fourth moment: estimates may have heavy tails.
    fourth = float(np.mean((estimate - estimate.mean()) ** 4))
    spread_se = np.sqrt(max(fourth - spread**4, 0.0) / n) / (2 * spread)
    return {
        "design": name,
        "procedure": procedure,
        "draws": draws,
        "withheld": round(1 - n / draws, 4),
        "truth": float(truth[0]),
        "mean": round(float(estimate.mean()), 5),
        "spread": round(spread, 5),
        "spread_se": round(float(spread_se), 5),
        "mean_error": round(float(error.mean()), 5),
        "ratio": round(float(error.mean()) / spread, 3),
        "coverage": round(float(held.mean()), 4),
        "coverage_se": round(float(np.sqrt(0.95 * 0.05 / n)), 4),
    }


def main() -> None:
    """Measure every design and write the figures."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--draws", type=int, default=1000)
    draws = parser.parse_args().draws
    rows = [row for name in DESIGNS for row in measure(name, draws)]
    FIGURES.write_text(json.dumps(rows, indent=1) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
