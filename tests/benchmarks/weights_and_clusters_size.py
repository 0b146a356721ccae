"""Simulated size with few clusters, and of the weighted, robust and k-class columns.

Rerun with ``python -m tests.benchmarks.weights_and_clusters_size`` from the project's top level;
``--draws N`` for another number of draws a design. Writes
``tests/benchmarks/figures/weights_and_clusters_size.json``. Same seed and draws, same figures.

Each rate is how often a true null is rejected at a nominal 5%, one less the coverage of the 95%
interval; ``monte_carlo_se`` is √(p(1 - p)/draws) at the nominal rate. Rows named "not offered"
show what a shortcut would do. Spreads are standard deviations of estimates over draws.
"""

from __future__ import annotations

import argparse
import json
from collections.abc import Callable, Iterable
from dataclasses import replace
from pathlib import Path

import numpy as np

from pipeline.core.design import FitOptions
from pipeline.core.estimate import Estimate
from pipeline.estimators import wild
from pipeline.estimators.errors import CLUSTER, ErrorRule
from pipeline.estimators.gmm import two_step_gmm
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.k_class import fuller, limited_information
from pipeline.estimators.least_squares import fixed_effects, ols
from pipeline.estimators.robust_location import huber, median
from pipeline.estimators.sample import plain, within
from pipeline.estimators.variance_weighted import variance_weighted
from tests.benchmarks.draws import drawn, rejections
from tests.benchmarks.estimators_size import TRUTH, Outcome, design_of, rejected

FIGURES = Path(__file__).parent / "figures" / "weights_and_clusters_size.json"
DRAWS = 1000
BOOTSTRAP = 999
RANDOM = np.random.Generator


def estimate(column: Estimate) -> float:
    return float(column.term("treatment")["coefficient"])


def few_clusters(groups: int, treated: int = 0, absorbed: bool = False) -> Callable[..., Outcome]:
    """Uneven clusters that share shocks to treatment and return.

    ``treated``: the treatment is one for all deals of that many clusters and zero for the others,
    else it varies within clusters too. ``absorbed``: effects of six years that cut across.
    """

    def draw(rng: RANDOM) -> Outcome:
        n = 20 * groups
        share = rng.dirichlet(np.full(groups, 2.0))
        firm = np.concatenate([np.arange(groups), rng.choice(groups, n - groups, p=share)])
        D = rng.normal(size=groups)[firm] + rng.normal(size=n)
        if treated:
            D = (firm < treated).astype(float)
        x, year = rng.normal(size=(n, 1)), rng.integers(0, 6, size=n)
        y = TRUTH * D + x[:, 0] + 0.3 * year * absorbed
        y = y + rng.normal(size=groups)[firm] + rng.normal(size=n)
        more = {"effects": {"year": year}} if absorbed else {}
        design = design_of(y, D, x, clusters={"acquirer": firm}, **more)
        fit = fixed_effects if absorbed else ols
        column = fit(design, FitOptions(cluster=True))
        term = column.term("treatment")
        gap = abs(term["coefficient"] - TRUTH) / term["std_error"]
        rule = ErrorRule(CLUSTER, dict(design.clusters), n)
        sample = within(design, FitOptions(cluster=True)) if absorbed else plain(design, rule)
        boot = wild.bootstrap(sample, design, firm[sample.kept], draws=BOOTSTRAP)
        return {
            "CR1, normal (not offered)": bool(gap > 1.959964),
            "CR1, t(G - 1)": rejected(column),
            "CR2, Satterthwaite": rejected(fit(design, FitOptions(covariance="cr2"))),
            "CR3, t(G - 1)": rejected(fit(design, FitOptions(covariance="cr3"))),
            "wild bootstrap interval": not boot.set.covers(TRUTH),
        }

    return draw


def measured(rng: RANDOM) -> Outcome:
    """120 deals, uneven measurement errors that fall with the size of the treatment."""
    n = 120
    x = rng.normal(size=(n, 1))
    D = rng.normal(size=n)
    omega = np.exp(1.2 * rng.normal(size=n) - 0.5 * D)
    y = TRUTH * D + x[:, 0] + rng.normal(size=n) + np.sqrt(omega) * rng.normal(size=n)
    design = design_of(y, D, x, outcome_variance=omega)
    root = 1 / np.sqrt(omega)
    weighed = replace(design, y=y * root, X=design.X * root[:, None], outcome_variance=None)
    column, least = variance_weighted(design, FitOptions()), ols(design, FitOptions())
    naive = ols(weighed, FitOptions(covariance="classical"))
    return {
        "known variances, HC3": rejected(column),
        "least squares, HC3": rejected(least),
        "weights 1/omega, classical (not offered)": rejected(naive),
        "_known variances": estimate(column),
        "_least squares": estimate(least),
        "_weights 1/omega": estimate(naive),
    }


def heavy_tails(groups: int) -> Callable[[RANDOM], Outcome]:
    """200 deals with errors of three degrees of freedom; with ``groups``, shocks shared in them."""

    def draw(rng: RANDOM) -> Outcome:
        n = 200
        firm = rng.integers(0, groups, size=n) if groups else np.arange(n)
        x = rng.normal(size=(n, 1))
        D, e = rng.normal(size=n), rng.standard_t(3, size=n)
        if groups:
            D = D + rng.normal(size=groups)[firm]
            e = e + rng.normal(size=groups)[firm]
        y = TRUTH * D + x[:, 0] + e
        design = design_of(y, D, x, clusters={"acquirer": firm} if groups else {})
        options = FitOptions(cluster=bool(groups))
        columns = {"median": median, "Huber": huber, "least squares": ols}
        found: Outcome = {}
        for name, fit in columns.items():
            column = fit(design, options)
            found[name] = rejected(column)
            found[f"_{name}"] = estimate(column)
        return found

    return draw


def weak(strength: float, groups: int) -> Callable[[RANDOM], Outcome]:
    """300 deals, five instruments, errors of choice and return correlated at .6."""

    def draw(rng: RANDOM) -> Outcome:
        n, L = 300, 5
        firm = rng.integers(0, groups, size=n)
        Z = rng.normal(size=(n, L))
        v = np.sqrt(0.5) * (rng.normal(size=n) + rng.normal(size=groups)[firm])
        u = 0.6 * v + 0.8 * rng.normal(size=n) * np.exp(0.3 * Z[:, 0])
        D = strength * Z.sum(axis=1) + v
        x = rng.normal(size=(n, 1))
        design = design_of(
            TRUTH * D + x[:, 0] + u,
            D,
            x,
            Z=Z,
            instruments=tuple(f"z{at}" for at in range(L)),
            clusters={"acquirer": firm},
        )
        found: Outcome = {}
        for name, fit in {
            "two-stage least squares": two_stage_least_squares,
            "LIML": limited_information,
            "Fuller": fuller,
            "GMM": two_step_gmm,
        }.items():
            column = fit(design, FitOptions())
            found[f"{name}, t interval"] = rejected(column)
            found[f"_{name}"] = estimate(column)
        found["Anderson-Rubin set"] = not column.sets["anderson_rubin"].covers(TRUTH)
        return found

    return draw


DESIGNS: dict[str, Callable[[RANDOM], Outcome]] = {
    **{f"{G} acquirers": few_clusters(G) for G in (6, 8, 12, 30)},
    "12 acquirers, year effects absorbed": few_clusters(12, absorbed=True),
    "12 acquirers, 4 of them treated": few_clusters(12, treated=4),
    "8 acquirers, 2 of them treated": few_clusters(8, treated=2),
    "returns measured with uneven error": measured,
    "heavy tails": heavy_tails(0),
    "heavy tails, 40 acquirers": heavy_tails(40),
    "five weak instruments, 50 acquirers": weak(0.06, 50),
    "five strong instruments, 50 acquirers": weak(0.4, 50),
}


def measure(name: str, draws: int) -> list[dict[str, object]]:
    """One row a procedure of the design: rates, then median bias and spread of the estimates."""
    found = drawn(DESIGNS[name], (20260302, list(DESIGNS).index(name)), draws)
    return rejections(name, found, draws) + list(_spreads(name, found, draws))


def _spreads(name: str, found: dict[str, list[float]], draws: int) -> Iterable[dict[str, object]]:
    for procedure, values in found.items():
        if not procedure.startswith("_"):
            continue
        gaps = np.array(values) - TRUTH
        low, high = np.percentile(gaps, [25, 75])
        yield {
            "design": name,
            "procedure": procedure.removeprefix("_"),
            "figure": "median of the estimates less the truth, and their quartile range",
            "median_bias": round(float(np.median(gaps)), 4),
            "quartile_range": round(float(high - low), 4),
            "draws": draws,
        }


def main() -> None:
    """Measure every design and write the figures."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--draws", type=int, default=DRAWS)
    draws = parser.parse_args().draws
    rows = [row for name in DESIGNS for row in measure(name, draws)]
    FIGURES.write_text(json.dumps(rows, indent=1) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
