"""Simulated size with few clusters and weak instruments: Anderson-Rubin, t and the bootstraps.

Rerun with ``python -m tests.benchmarks.instruments_size`` from the project's top level;
``--draws N`` for another number of draws a design. Writes
``tests/benchmarks/figures/instruments_size.json``. Same seed and draws, same figures.

Each rate is how often a true null is rejected at a nominal 5%; ``monte_carlo_se`` is
√(p(1 - p)/draws) at the nominal rate. "power" rows reject a value that is false by one standard
deviation of the outcome's error over the treatment's, with strong instruments. Deals of one
acquirer share shocks to everything, instruments too; the numbers of deals are uneven, the variance
of the return rises with the first instrument, choice and return correlate at .8. Rows named "not
offered" show what a shortcut would do.
"""

from __future__ import annotations

import argparse
import json
from collections.abc import Callable
from pathlib import Path

import numpy as np

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import NotApplicable, TestResult, t_tail
from pipeline.estimators import wild, wild_instruments, wild_two_way
from pipeline.estimators.anderson_rubin import anderson_rubin_test
from pipeline.estimators.clustered_forms import inverted_forms
from pipeline.estimators.errors import CLUSTER, ErrorRule
from pipeline.estimators.least_squares import ols
from pipeline.estimators.sample import plain
from pipeline.estimators.stages import Parts, parts_of, reduced_forms
from pipeline.estimators.wild_instruments import TWO_STAGES, Weights
from tests.benchmarks.draws import drawn, rejections
from tests.benchmarks.estimators_size import TRUTH, Outcome, design_of

FIGURES = Path(__file__).parent / "figures" / "instruments_size.json"
DRAWS, BOOTSTRAP = 600, 199
RANDOM = np.random.Generator
WEAK, STRONG = 0.15, 0.6


def uneven(rng: RANDOM, groups: int, n: int) -> np.ndarray:
    share = rng.dirichlet(np.full(groups, 2.0))
    own = np.repeat(np.arange(groups), 2)
    return np.concatenate([own, rng.choice(groups, n - 2 * groups, p=share)])


def deals(rng: RANDOM, groups: int, L: int, strength: float, months: int = 0) -> Design:
    """20 deals an acquirer; with ``months`` every shock has a part common to the month too."""
    n = 20 * groups
    firm, month = uneven(rng, groups, n), rng.integers(0, max(months, 1), size=n)

    def shock(*shape: int) -> np.ndarray:
        found = rng.normal(size=(n, *shape)) + rng.normal(size=(groups, *shape))[firm]
        if months:
            found = found + rng.normal(size=(months, *shape))[month]
        return np.asarray(found / np.sqrt(3 if months else 2))

    Z, x, v = shock(L), shock(1), shock()
    u = np.exp(0.3 * Z[:, 0]) * (0.8 * v + 0.6 * shock())
    D = strength * Z.sum(axis=1) / np.sqrt(L) + v
    clusters = {"acquirer": firm, **({"month": month} if months else {})}
    return design_of(
        TRUTH * D + x[:, 0] + u,
        D,
        x,
        Z=Z,
        instruments=tuple(f"z{at}" for at in range(L)),
        clusters=clusters,
    )


def rejects(parts: Parts, value: float) -> dict[str, bool]:
    """Whether the test of ``value`` rejects: as offered, and CR1 against F(L, G - 1)."""
    offered = anderson_rubin_test(inverted_forms(parts), value)
    plain_form = anderson_rubin_test(reduced_forms(parts), value)
    assert isinstance(plain_form, TestResult)
    return {
        "Anderson-Rubin": not isinstance(offered, NotApplicable) and offered.p_value < 0.05,
        "Anderson-Rubin, CR1 and F(L, G - 1) (not offered)": plain_form.p_value < 0.05,
    }


def instrumented(groups: int, L: int) -> Callable[[RANDOM], Outcome]:
    """Weak instruments, one cluster dimension."""

    def draw(rng: RANDOM) -> Outcome:
        parts = parts_of(deals(rng, groups, L, WEAK), FitOptions())
        found: Outcome = dict(rejects(parts, TRUTH))
        moments = wild_instruments.moments_of(parts)
        kind = wild.WEBB if groups <= wild.FEW_FOR_SIGNS else wild.SIGNS
        seed = int(rng.integers(0, 2**31))
        blocks = list(wild.weight_blocks(groups, BOOTSTRAP, kind, seed)[0])
        free = parts.sample.n - parts.k_first
        for name, weights in {
            "two stages": TWO_STAGES,
            "Fuller": Weights(root=True, less=1 / free),
        }.items():
            b, error = wild_instruments.estimated(moments, weights)
            found[f"{name}, t(G - 1)"] = t_tail((b - TRUTH) / error, groups - 1) < 0.05
            p = wild_instruments.p_value(moments, weights, TRUTH, blocks, enumerated=False)
            found[f"{name}, wild restricted efficient bootstrap"] = p <= 0.05
        strong = parts_of(deals(rng, groups, L, STRONG), FitOptions())
        power = rejects(strong, TRUTH + 1.0)["Anderson-Rubin"]
        return {**found, "Anderson-Rubin, power": power}

    return draw


def two_dimensions(groups: int, L: int) -> Callable[[RANDOM], Outcome]:
    """As many months as acquirers, both with shocks."""

    def draw(rng: RANDOM) -> Outcome:
        parts = parts_of(deals(rng, groups, L, WEAK, months=groups), FitOptions())
        strong = parts_of(deals(rng, groups, L, STRONG, months=groups), FitOptions())
        power = rejects(strong, TRUTH + 1.0)["Anderson-Rubin"]
        return {**rejects(parts, TRUTH), "Anderson-Rubin, power": power}

    return draw


def least_squares(groups: int, months: int) -> Callable[[RANDOM], Outcome]:
    """Least squares with two cluster dimensions."""

    def draw(rng: RANDOM) -> Outcome:
        n = 20 * groups
        firm, month = uneven(rng, groups, n), rng.integers(0, months, size=n)
        D, e = (
            rng.normal(size=n) + rng.normal(size=groups)[firm] + rng.normal(size=months)[month]
            for _ in range(2)
        )
        x = rng.normal(size=(n, 1))
        design = design_of(x[:, 0] + e, D, x, clusters={"acquirer": firm, "month": month})
        column = ols(design, FitOptions(cluster=True))
        sample = plain(design, ErrorRule(CLUSTER, dict(design.clusters), n))
        seed = int(rng.integers(0, 2**31))
        both = wild_two_way.bootstrap(sample, design, firm, month, draws=BOOTSTRAP, seed=seed)
        fewest = firm if groups <= months else month
        one = wild.p_value(sample, design, fewest, draws=BOOTSTRAP, seed=seed)
        return {
            "two-way errors, t(min G - 1)": column.term("treatment")["p_value"] < 0.05,
            "two-way errors, wild bootstrap": both.p_value <= 0.05,
            "one-way errors, wild bootstrap (not offered here)": one <= 0.05,
        }

    return draw


DESIGNS: dict[str, Callable[[RANDOM], Outcome]] = {
    **{
        f"{L} weak instrument{'s' if L > 1 else ''}, {G} acquirers": instrumented(G, L)
        for G in (8, 12, 30)
        for L in (1, 2, 5)
    },
    **{
        f"{L} weak instrument{'s' if L > 1 else ''}, {G} acquirers and months": two_dimensions(G, L)
        for G in (12, 30)
        for L in (1, 2, 5)
    },
    "least squares, 8 acquirers and 20 months": least_squares(8, 20),
    "least squares, 12 acquirers and months": least_squares(12, 12),
    "least squares, 30 acquirers and months": least_squares(30, 30),
}


def measure(name: str, draws: int) -> list[dict[str, object]]:
    """One row a procedure of the design."""
    found = drawn(DESIGNS[name], (20260304, list(DESIGNS).index(name)), draws)
    return rejections(name, found, draws)


def main() -> None:
    """Measure every design and write the figures."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--draws", type=int, default=DRAWS)
    draws = parser.parse_args().draws
    rows = [row for name in DESIGNS for row in measure(name, draws)]
    FIGURES.write_text(json.dumps(rows, indent=1) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
