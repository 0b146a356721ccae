"""Simulated coverage of the sensitivity analyses where the truth is known.

Rerun with ``python -m tests.benchmarks.scrutiny_coverage`` from the project's top level; add
``--draws N`` for another number of draws a row. Writes
``tests/benchmarks/figures/scrutiny_coverage.json``. Same seed and draws, same figures. About three
minutes on one core at the default.

``rate`` is how often the interval, bound or set holds the truth, or how often a true null is kept;
``claimed`` is what it should be, at least, and just that where ``exact``. ``least_squares`` is
how often the plain interval holds the truth in the same samples. ``monte_carlo_se`` is
√(p(1 - p)/draws) at the claimed rate, or at .999 for bounds, which should hold always.
"""

from __future__ import annotations

import argparse
import json
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import t_reach
from pipeline.core.multiplicity import romano_wolf
from pipeline.estimators.stages import parts_of
from pipeline.scrutiny import (
    both_ways,
    breakdown,
    confounder,
    correlation,
    curve,
    exclusion,
    grid,
    mismeasured,
    omitted,
)
from pipeline.scrutiny.ground import Ground, ground_of, partial_r_squared
from pipeline.scrutiny.multiplicity import score_draws
from pipeline.scrutiny.simex import simex
from tests.scrutiny import worlds

FIGURES = Path(__file__).parent / "figures" / "scrutiny_coverage.json"
OPTIONS = FitOptions()
TRUTH = worlds.EFFECT
LEVEL = 0.95
Held = tuple[bool, bool]


@dataclass(frozen=True, slots=True)
class Row:
    """One simulation: words, what it claims, whether exactly, and a draw of it."""

    what: str
    claimed: float
    exact: bool
    draw: Callable[[np.random.Generator], Held]


def inside(low: float, high: float) -> bool:
    return bool(low <= TRUTH <= high)


def plain(ground: Ground) -> bool:
    half = t_reach(LEVEL, ground.robust_df) * ground.robust
    return inside(ground.estimate - half, ground.estimate + half)


def reliability(rng: np.random.Generator) -> Held:
    """300 deals, the treatment recorded with reliability .7, the error variance a share of it."""
    ground = ground_of(worlds.noisy_treatment(rng, 300), OPTIONS)
    found = mismeasured.reliability_corrected(ground, {"D": worlds.RELIABILITY})
    return inside(*found.term("D", LEVEL)[1:]), plain(ground)


def reliability_clustered(rng: np.random.Generator) -> Held:
    """60 clusters of five deals that share half of their errors."""
    n = 300
    codes = np.repeat(np.arange(60), 5)
    x, shared = rng.normal(size=(2, 60))
    true = 0.6 * x[codes] + 0.8 * rng.normal(size=n)
    y = TRUTH * true + 0.4 * x[codes] + shared[codes] + rng.normal(size=n)
    design = worlds.made(
        y, true + rng.normal(size=n) * np.sqrt(3 / 7), x[codes], clusters={"company": codes}
    )
    ground = ground_of(design, OPTIONS)
    found = mismeasured.reliability_corrected(ground, {"D": worlds.RELIABILITY})
    return inside(*found.term("D", LEVEL)[1:]), plain(ground)


def simulated_extrapolation(rng: np.random.Generator) -> Held:
    """As above with 600 deals, by simulation and the rational curve."""
    ground = ground_of(worlds.noisy_treatment(rng, 600), OPTIONS)
    film = simex(ground, "D", worlds.RELIABILITY, seed=int(rng.integers(2**31)), draws=40)
    return inside(*film.interval("rational", LEVEL)), plain(ground)


def reverse_regression(rng: np.random.Generator) -> Held:
    """Direct and reverse regression, 3,000 deals: the bounds have no sampling error of theirs."""
    ground = ground_of(worlds.noisy_treatment(rng, 3000), OPTIONS)
    bounds = mismeasured.reverse_bounds(ground, ("D",))["D"]
    return inside(bounds.low, bounds.high), plain(ground)


def misclassified(rng: np.random.Generator) -> Held:
    """600 deals, 10% of the treated recorded as untreated and 15% the other way."""
    ground = ground_of(worlds.misrecorded_choice(rng, 600, 0.1, 0.15), OPTIONS)
    return inside(*mismeasured.misclassified(ground, 0.1, 0.15, LEVEL)[1:]), plain(ground)


def union(rng: np.random.Generator) -> Held:
    """400 deals, a direct effect of .15 where ±.15 is allowed: the worst the union is made for."""
    design = worlds.tainted_instrument(rng, 400, 0.15)
    parts = parts_of(design, OPTIONS)
    found = exclusion.union_of_intervals(parts, np.array([-0.15]), np.array([0.15]), LEVEL)
    bare = exclusion.at_violation(parts, np.zeros(1), LEVEL)
    return inside(found.low, found.high), inside(bare.low, bare.high)


def union_anderson_rubin(rng: np.random.Generator) -> Held:
    """The same by Anderson-Rubin sets."""
    design = worlds.tainted_instrument(rng, 400, 0.15)
    parts = parts_of(design, OPTIONS)
    found = exclusion.union_of_anderson_rubin(parts, np.array([-0.15]), np.array([0.15]), LEVEL)
    bare = exclusion.at_violation(parts, np.zeros(1), LEVEL)
    return found.covers(TRUTH), inside(bare.low, bare.high)


def local(rng: np.random.Generator) -> Held:
    """400 deals, the direct effect drawn from the normal that is assumed."""
    design = worlds.tainted_instrument(rng, 400, float(rng.normal(0.05, 0.1)))
    parts = parts_of(design, OPTIONS)
    found = exclusion.local_to_zero(parts, np.array([0.05]), np.array([[0.01]]), LEVEL)
    bare = exclusion.at_violation(parts, np.zeros(1), LEVEL)
    return inside(found.low, found.high), inside(bare.low, bare.high)


def difference(rng: np.random.Generator) -> Held:
    """400 deals, a clean instrument, least squares biased: the difference holds what it is."""
    design = worlds.tainted_instrument(rng, 400, 0.0)
    parts = parts_of(design, OPTIONS)
    found = breakdown.difference_at(parts, np.zeros(1), LEVEL)
    # D's variance beside x is .49 + 2, its covariance with the error -1: plim of least squares.
    truth = 1 / 2.49
    bare = exclusion.at_violation(parts, np.zeros(1), LEVEL)
    other = breakdown.least_squares_of(parts)
    return found.low <= truth <= found.high, bool(bare.low <= other <= bare.high)


def both_equations(rng: np.random.Generator) -> Held:
    """400 deals, return and choice answer one another: what return does to choice, three stages."""
    design = worlds.simultaneous(rng, 400)
    found = both_ways.both_ways(design, ("x1", "x2"), OPTIONS)
    wanted = [t for t in found if t.equation == "choice" and t.term == design.outcome]
    last = wanted[-1]
    return last.ci_low <= worlds.ANSWER <= last.ci_high, plain(ground_of(design, OPTIONS))


def unequal_variances(rng: np.random.Generator) -> Held:
    """800 deals, a common confounder, instruments made from unequal variances."""
    design = worlds.unequal_variances(rng, 800)
    found = exclusion.heteroskedastic_instruments(design, OPTIONS)
    return found.interval.covers(TRUTH), plain(ground_of(design, OPTIONS))


def proportional(rng: np.random.Generator) -> Held:
    """600 deals, hidden selection as strong as recorded, told how much R² it adds; resampled."""
    design = worlds.proportional(rng, 600)
    ground = ground_of(design, OPTIONS)
    yy = TRUTH**2 * 1.32 + 2 * TRUTH * 0.8 + 2.25
    yd = TRUTH * 1.32 + 0.8
    yw = TRUTH * 0.4 + 1
    population = np.array([[yy, yd, yw], [yd, 1.32, 0.4], [yw, 0.4, 1.0]])
    more = 1 - 0.25 / yy - omitted.movement_from(population).long_r2
    draws = omitted.resampled_effects(
        ground, np.arange(ground.n), {"true": (1.0, more)}, 199, int(rng.integers(2**31))
    )["true"]
    movement = omitted.movement_of(ground)
    effect = omitted.adjusted_effect(movement, movement.long_r2 + more).effect
    return inside(*omitted.resampled_interval(effect, draws, ground.robust_df, LEVEL)), plain(
        ground
    )


def known_confounder(rng: np.random.Generator) -> Held:
    """300 deals, a hidden factor whose two partial R² are told: the adjusted interval."""
    design, hidden = worlds.confounded(rng, 300)
    ground = ground_of(design, OPTIONS)
    with_d = partial_r_squared(ground.D, hidden, ground.W)
    with_y = partial_r_squared(ground.y, hidden, np.column_stack([ground.D, ground.W]))
    at = np.array([with_d]), np.array([with_y])
    # The factor makes the effect too small here, so it is added back.
    value = ground.estimate + confounder.bias(ground.classical, ground.df, *at)[0]
    error = confounder.adjusted_error(ground.robust, ground.df, *at)[0]
    half = t_reach(LEVEL, ground.robust_df) * float(error)
    return inside(value - half, value + half), plain(ground)


def correlated_choice(rng: np.random.Generator) -> Held:
    """600 deals, errors of choice and outcome correlate by .5, and that is told."""
    design = worlds.hidden_choice(rng, 600, 0.5)
    ground = ground_of(design, OPTIONS)
    choice = correlation.treatment_choice(design)
    return inside(*correlation.effect_at(ground, choice, 0.5, LEVEL)[1:]), plain(ground)


def family_wise(rng: np.random.Generator) -> Held:
    """40 related tests of true nulls on 40 clusters: none rejected at 5%, by step-down or raw."""
    codes = np.repeat(np.arange(40), 5)
    common = rng.normal(size=(200, 1))
    D = (rng.random(40) < 0.5).astype(float)[codes]
    Y = common + rng.normal(size=(200, 40)) + rng.normal(size=(40, 40))[codes]
    d = D - D.mean()
    E = Y - Y.mean(axis=0)
    b = d @ E / (d @ d)
    psi = d[:, None] * (E - np.outer(d, b)) / (d @ d)
    sums = np.add.reduceat(psi, np.arange(0, 200, 5), axis=0)
    t = b / np.sqrt(40 / 39 * 199 / 198 * np.sum(sums**2, axis=0))
    draws = score_draws(d[:, None] * E / (d @ d), codes, 499, int(rng.integers(2**31)))
    return bool(romano_wolf(t, draws).min() > 0.05), bool(np.abs(t).max() < t_reach(LEVEL, 39))


def whole_curve(rng: np.random.Generator) -> Held:
    """24 cells on 150 deals where the treatment does nothing: the curve's median by permutation."""
    n = 150
    x = rng.normal(size=(n, 2))
    D = (rng.random(n) < 0.4).astype(float)
    y = x[:, 0] + rng.standard_t(4, size=n)
    design: Design = worlds.made(y, D, x)
    choices = grid.Choices(
        outcomes={"one": y, "two": y + 0.5 * rng.normal(size=n)},
        controls={"all": ("x0", "x1"), "first": ("x0",), "none": ()},
        winsorise={"no": 0.0, "2%": 0.02},
        samples={"all": np.ones(n, dtype=bool), "most": x[:, 1] > -1},
    )
    found = grid.specification_grid(design, choices, OPTIONS)
    told = curve.with_permutations(found, curve.summary(found), 99, int(rng.integers(2**31)))
    return told.p_median > 0.05, curve.summary(found).significant == 0


ROWS = (
    Row("reliability-corrected", 0.95, True, reliability),
    Row("reliability-corrected, clusters", 0.95, True, reliability_clustered),
    Row("simulation-extrapolation, rational", 0.95, False, simulated_extrapolation),
    Row("direct and reverse regression", 1.0, False, reverse_regression),
    Row("misclassified choice", 0.95, True, misclassified),
    Row("union of intervals at the edge", 0.95, False, union),
    Row("union of Anderson-Rubin sets at the edge", 0.95, False, union_anderson_rubin),
    Row("local to zero", 0.95, True, local),
    Row("difference of two stages and least squares", 0.95, True, difference),
    Row("outcome in the equation of the choice, three stages", 0.95, True, both_equations),
    Row("instruments from unequal variances", 0.95, True, unequal_variances),
    Row("proportional selection, resampled", 0.95, True, proportional),
    Row("confounder of known strength", 0.95, True, known_confounder),
    Row("known correlation of errors", 0.95, True, correlated_choice),
    Row("family-wise error, step-down", 0.95, False, family_wise),
    Row("whole curve by permutation", 0.95, True, whole_curve),
)


def simulate(draws: int, seed: int = 20260301) -> dict[str, object]:
    """All rows."""
    rows = []
    for at, row in enumerate(ROWS):
        held = np.array([row.draw(np.random.default_rng([seed, at, i])) for i in range(draws)])
        rate = min(row.claimed, 0.999)
        rows.append(
            {
                "what": row.what,
                "design": (row.draw.__doc__ or "").strip(),
                "rate": round(float(held[:, 0].mean()), 4),
                "claimed": row.claimed,
                "exact": row.exact,
                "least_squares": round(float(held[:, 1].mean()), 4),
                "monte_carlo_se": round(float(np.sqrt(rate * (1 - rate) / draws)), 4),
            }
        )
    return {"made_by": "python -m tests.benchmarks.scrutiny_coverage", "draws": draws, "rows": rows}


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--draws", type=int, default=800)
    parser.add_argument("--to", type=Path, default=FIGURES)
    asked = parser.parse_args()
    found = simulate(asked.draws)
    asked.to.write_text(json.dumps(found, indent=1, ensure_ascii=False) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
