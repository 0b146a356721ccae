"""Simulated coverage of the likelihoods, treatment estimators, matching and bounds.

Rerun with ``python -m tests.benchmarks.treatment_size`` from the project's top level; ``--draws N``
for another number of draws a design. Writes ``tests/benchmarks/figures/treatment_size.json``. Same
seed and draws, same figures. About three minutes on one core at the default.

Each row is a rejection rate of a true null at a nominal 5%, one less the coverage of the 95% set.
``monte_carlo_se`` is √(p(1 - p)/draws) at the nominal rate: a valid procedure lies within about two
of them of .05. Procedures marked "not offered" or compared for contrast are expected to fail.
"""

from __future__ import annotations

import argparse
import json
from collections.abc import Callable
from pathlib import Path

import numpy as np

from pipeline.core.design import Design, FitOptions, SelectionRows
from pipeline.core.estimate import Estimate
from pipeline.estimators.bounds import lee_bounds
from pipeline.estimators.doubly_robust import (
    doubly_robust,
    doubly_robust_treated,
    partially_linear,
)
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.least_squares import ols
from pipeline.estimators.matching import matching, matching_treated
from pipeline.estimators.selection_iv import selection_two_stage
from pipeline.estimators.selection_ml import heckman_likelihood
from pipeline.estimators.switching import ON_TREATED, ON_UNTREATED, switching_regression
from pipeline.estimators.treatment import fitted_probability_instrument, treatment_two_step
from pipeline.estimators.treatment_ml import treatment_likelihood
from pipeline.estimators.weighting import entropy_balancing, weighting, weighting_treated
from tests.benchmarks.draws import drawn, rejections
from tests.benchmarks.estimators_size import TRUTH, candidates, design_of

FIGURES = Path(__file__).parent / "figures" / "treatment_size.json"
Outcome = dict[str, float]


def missed(column: Estimate, truth: float, name: str = "treatment") -> bool:
    """Whether the t interval of ``name`` misses the truth."""
    low, high = column.intervals[column.names.index(name)]
    return not low <= truth <= high


def likelihood(rng: np.random.Generator) -> Outcome:
    """800 candidates, correlation .6: the likelihood's three kinds of errors."""
    design = candidates(rng)
    column = heckman_likelihood(design, FitOptions())
    low, high = (np.tanh(column.fit["atanh_rho"] + side * _reach(column)) for side in (-1.0, 1.0))
    return {
        "likelihood, observed information": missed(column, TRUTH),
        "likelihood, sandwich": missed(
            heckman_likelihood(design, FitOptions(covariance="hc1")), TRUTH
        ),
        "likelihood, correlation": not low <= 0.6 <= high,
        "least squares on deals": missed(ols(design, FitOptions()), TRUTH),
    }


def _reach(column: Estimate) -> float:
    return 1.959964 * column.fit["se_rho"] / (1 - column.fit["rho"] ** 2)


def chosen(rng: np.random.Generator) -> Design:
    """600 deals; choice moved by z, a control and a reason that moves the return (.5)."""
    n = 600
    x, z = rng.normal(size=(2, n))
    v = rng.normal(size=n)
    u = 0.5 * v + np.sqrt(0.75) * rng.normal(size=n)
    D = (0.1 + 0.4 * x + 0.8 * z + v > 0).astype(float)
    return design_of(TRUTH * D + x + u, D, x[:, None], Z=z[:, None], instruments=("z",))


def endogenous(rng: np.random.Generator) -> Outcome:
    """One effect for all: every estimator of a chosen treatment aims at it."""
    design, options = chosen(rng), FitOptions()
    robust = FitOptions(covariance="hc1")
    return {
        "control function, two-step covariance": missed(treatment_two_step(design, options), TRUTH),
        "control function, sandwich": missed(treatment_two_step(design, robust), TRUTH),
        "likelihood": missed(treatment_likelihood(design, options), TRUTH),
        "switching regression, ATE": missed(switching_regression(design, options), TRUTH),
        "fitted probability as instrument": missed(
            fitted_probability_instrument(design, options), TRUTH
        ),
        "least squares": missed(ols(design, options), TRUTH),
    }


def _gains(rng: np.random.Generator, n: int) -> tuple[np.ndarray, ...]:
    x, z = rng.normal(size=(2, n))
    v = rng.normal(size=n)
    gain = 1 + 0.5 * x + 0.7 * v + 0.3 * rng.normal(size=n)
    D = (0.1 + 0.4 * x + 0.8 * z + v > 0).astype(float)
    y = x + 0.4 * v + rng.normal(size=n) + gain * D
    return x, z, D, y, gain


def _population(made: Callable[..., tuple[np.ndarray, ...]]) -> tuple[float, float, float]:
    """ATE, ATT, ATU of two million deals: exact to about .001."""
    parts = made(np.random.default_rng(1), 2_000_000)
    D, gain = parts[2], parts[-1]
    return float(gain.mean()), float(gain[D == 1].mean()), float(gain[D == 0].mean())


def unequal_gains(rng: np.random.Generator) -> Outcome:
    """800 deals; those that gain more choose it more often."""
    x, z, D, y, _ = _gains(rng, 800)
    design = design_of(y, D, x[:, None], Z=z[:, None], instruments=("z",))
    column = switching_regression(design, FitOptions())
    return {
        "switching regression, ATE": missed(column, SWITCHING[0]),
        "switching regression, ATT": missed(column, SWITCHING[1], ON_TREATED),
        "switching regression, ATU": missed(column, SWITCHING[2], ON_UNTREATED),
        "least squares": missed(ols(design, FitOptions()), SWITCHING[0]),
    }


def both(rng: np.random.Generator) -> Outcome:
    """1,200 candidates; announcing and the treatment both share a reason with the return."""
    A = 1200
    x, w, z = rng.normal(size=(3, A))
    v, c = rng.normal(size=(2, A))
    u = 0.6 * v + 0.5 * c + 0.6 * rng.normal(size=A)
    D = (0.7 * z + 0.3 * x + c > 0).astype(float)
    y = TRUTH * D + x + u
    selected = 0.2 + 0.4 * x + 0.4 * z + 0.9 * w + v > 0
    row = np.full(A, -1)
    row[selected] = np.arange(selected.sum())
    rows = SelectionRows(
        W=np.column_stack([np.ones(A), x, z, w]),
        names=("constant", "control 0", "z", "wave"),
        excluded=("wave",),
        selected=selected,
        outcome_row=row,
    )
    s = selected
    design = design_of(y[s], D[s], x[s, None], Z=z[s, None], instruments=("z",), selection=rows)
    column = selection_two_stage(design, FitOptions())
    return {
        "selection and instruments, sandwich": missed(column, TRUTH),
        "selection and instruments, headline set": not column.interval.covers(TRUTH),
        "selection and instruments, Anderson-Rubin": not column.sets["anderson_rubin"].covers(
            TRUTH
        ),
        "two stages without selection": missed(
            two_stage_least_squares(design, FitOptions()), TRUTH
        ),
    }


def _seen_reasons(rng: np.random.Generator, n: int) -> tuple[np.ndarray, ...]:
    x, other = rng.normal(size=(2, n))
    p = 1 / (1 + np.exp(-(-0.3 + 0.6 * x - 0.4 * other)))
    D = (rng.random(n) < p).astype(float)
    gain = 0.5 + 0.6 * x
    y = x - 0.5 * other + gain * D + rng.normal(size=n) * (1 + 0.5 * D)
    return x, other, D, y, gain


def observables(rng: np.random.Generator) -> Outcome:
    """500 deals; every reason of the choice is among the controls, gains differ."""
    x, other, D, y, _ = _seen_reasons(rng, 500)
    design, options = design_of(y, D, np.column_stack([x, other])), FitOptions()
    lines = FitOptions(learner="parametric")
    ate, att, _ = OBSERVED
    over_all = {
        "inverse probability, ATE": weighting(design, options),
        "doubly robust, parametric, ATE": doubly_robust(design, lines),
        "matching, Abadie-Imbens, ATE": matching(design, options),
        "matching, four nearest, ATE": matching(design, FitOptions(matches=4)),
        "matching, linear representation, ATE": matching(design, FitOptions(covariance="hc1")),
    }
    over_treated = {
        "inverse probability, ATT": weighting_treated(design, options),
        "entropy balancing, ATT": entropy_balancing(design, options),
        "doubly robust, parametric, ATT": doubly_robust_treated(design, lines),
        "matching, Abadie-Imbens, ATT": matching_treated(design, options),
    }
    plain = ols(design_of(y, D, np.empty((500, 0))), options)
    return {
        **{name: missed(column, ate) for name, column in over_all.items()},
        **{name: missed(column, att) for name, column in over_treated.items()},
        "difference of means": missed(plain, ate),
    }


def learnt(rng: np.random.Generator) -> Outcome:
    """400 deals of 40 acquirers, curved outcome, one effect: cross-fitted ridge, clusters whole."""
    n, groups = 400, 40
    firm = rng.integers(0, groups, size=n)
    x = rng.normal(size=(n, 3)) + 0.5 * rng.normal(size=(groups, 3))[firm]
    p = 1 / (1 + np.exp(-(0.6 * x[:, 0] - 0.3 * x[:, 1] ** 2 + 0.3)))
    D = (rng.random(n) < p).astype(float)
    y = TRUTH * D + x[:, 0] + x[:, 1] ** 2 + rng.normal(size=groups)[firm] + rng.normal(size=n)
    design = design_of(y, D, x, clusters={"acquirer": firm})
    return {
        "doubly robust, penalised, clustered": missed(doubly_robust(design, FitOptions()), TRUTH),
        "partially linear, penalised, clustered": missed(
            partially_linear(design, FitOptions()), TRUTH
        ),
        "least squares, clustered": missed(ols(design, FitOptions(cluster=True)), TRUTH),
    }


def trimmed(rng: np.random.Generator) -> Outcome:
    """2,000 candidates; treatment at random, announcing rises with it; truth at the lower bound.

    Those who announce only when treated are the highest of the treated: trimming the highest is
    then exactly right, so the effect equals the lower bound, the hardest case for the interval.
    """
    A = 2000
    D = (rng.random(A) < 0.5).astype(float)
    base = rng.normal(size=A)
    willing = rng.random(A) < 0.8
    # Of the willing, the highest quarter announces only with the treatment.
    selected = willing & ((D == 1) | (base < 0.6744897501960817))
    y = TRUTH * D + base
    row = np.full(A, -1)
    row[selected] = np.arange(selected.sum())
    rows = SelectionRows(
        W=np.column_stack([np.ones(A), D]),
        names=("constant", "treatment"),
        excluded=(),
        selected=selected,
        outcome_row=row,
    )
    design = design_of(y[selected], D[selected], np.empty((selected.sum(), 0)), selection=rows)
    column = lee_bounds(design, FitOptions())
    return {
        "trimming bounds, interval": not column.interval.covers(TRUTH),
        "difference of deal means": missed(column, TRUTH),
    }


DESIGNS: dict[str, tuple[Callable[[np.random.Generator], Outcome], float]] = {
    "selection, 800 candidates": (likelihood, 1),
    "chosen treatment, one effect": (endogenous, 1),
    "chosen treatment, unequal gains": (unequal_gains, 4),
    "selection and instruments": (both, 2),
    "observables, 500 deals": (observables, 1),
    "observables learnt, 400 deals of 40 acquirers": (learnt, 0.4),
    "bounds, truth at the lower one": (trimmed, 4),
}
"""Name -> (one draw, how many times the draws asked for)."""
SWITCHING = _population(_gains)
OBSERVED = _population(_seen_reasons)


def measure(name: str, draws: int) -> list[dict[str, object]]:
    """One row a procedure of the design."""
    draw, times = DESIGNS[name]
    draws = round(draws * times)
    found = drawn(draw, (20260302, list(DESIGNS).index(name)), draws)
    return rejections(name, found, draws)


def main() -> None:
    """Measure every design and write the figures."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--draws", type=int, default=500)
    draws = parser.parse_args().draws
    rows = [row for name in DESIGNS for row in measure(name, draws)]
    FIGURES.parent.mkdir(exist_ok=True)
    FIGURES.write_text(json.dumps(rows, indent=1) + "\n", encoding="utf-8")
    for row in rows:
        print(" | ".join(str(value) for value in row.values()))


if __name__ == "__main__":
    main()
