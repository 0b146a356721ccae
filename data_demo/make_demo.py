"""Write the demo data: invented acquirers, their deals, prices and the truth behind them.

Usage: python data_demo/make_demo.py [--out DIR] [--weak-instruments] [--seed N]
"""

from __future__ import annotations

import argparse
import json
import sys
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

# The modules beside this script must be found however the script is started or imported.
HERE = Path(__file__).resolve().parent
if str(HERE) not in sys.path:
    sys.path.insert(0, str(HERE))

from demo_deals import (  # noqa: E402
    CompanyYears,
    Terms,
    announcement_effects,
    choose_payment,
    decide_bids,
    draw_company_years,
    draw_terms,
)
from demo_market import (  # noqa: E402
    Companies,
    Factors,
    Grid,
    build_grid,
    draw_companies,
    draw_factors,
    draw_returns,
    price_paths,
)
from demo_params import (  # noqa: E402
    COMPANIES,
    DEFAULT_SEED,
    BoolArray,
    FloatArray,
    Parameters,
    streams,
    weakened,
)
from demo_tables import (  # noqa: E402
    benchmark_table,
    candidate_table,
    deal_table,
    factor_table,
    price_table,
    write_deals,
    write_parquet,
)
from demo_timing import Schedule, draw_schedule  # noqa: E402
from demo_truth import truth_record  # noqa: E402


@dataclass(frozen=True, slots=True)
class World:
    """One simulated data set with its hidden parts; shapes as in the parts' own docstrings.

    `returns` (300, T) include the announcement effects, `in_shares` and `effects` are (n,).
    """

    grid: Grid
    factors: Factors
    companies: Companies
    years: CompanyYears
    announced: BoolArray
    plan: Schedule
    terms: Terms
    in_shares: BoolArray
    effects: FloatArray
    returns: FloatArray
    volumes: FloatArray


def plant_events(
    params: Parameters,
    grid: Grid,
    companies: Companies,
    plan: Schedule,
    effects: FloatArray,
    returns: FloatArray,
    rng: np.random.Generator,
) -> FloatArray:
    """Returns (300, T) with effects (n,) spread over three sessions and earnings noise added.

    The split over sessions -1, 0, +1 is `day_split`; each earnings release adds noise of
    `earnings_sd_multiple` daily standard deviations once. Raises nothing.
    """
    out, venue = returns.copy(), companies.exchange[plan.company]
    for offset, part in zip((-1, 0, 1), params.day_split, strict=True):
        where = grid.sessions[venue, plan.event + offset]
        np.add.at(out, (plan.company, where), part * effects)
    jump = params.earnings_sd_multiple * companies.noise_sd[plan.company]
    jump = np.where(plan.second, 0.0, jump * rng.standard_normal(plan.event.size))
    np.add.at(out, (plan.company, grid.sessions[venue, plan.earnings]), jump)
    return out


def draw_volumes(
    grid: Grid, companies: Companies, plan: Schedule, rng: np.random.Generator
) -> FloatArray:
    """Shares traded per session (300, T), higher on and after the event session."""
    noise = np.exp(0.35 * rng.standard_normal((COMPANIES, grid.days.size)))
    volumes = companies.volume[:, None] * noise
    venue = companies.exchange[plan.company]
    for offset, multiple in ((0, 2.8), (1, 1.7)):
        np.multiply.at(volumes, (plan.company, grid.sessions[venue, plan.event + offset]), multiple)
    return np.asarray(volumes)


def simulate(params: Parameters, seed: int) -> World:
    """The whole data generating process in memory. ValueError for a negative seed."""
    rngs = streams(seed)
    grid = build_grid()
    factors = draw_factors(params, grid, rngs["market"])
    companies = draw_companies(params, rngs["companies"])
    base = draw_returns(params, grid, factors, companies, rngs["noise"])
    closes = price_paths(companies, base)
    years = draw_company_years(params, grid, companies, closes, rngs)
    announced = decide_bids(params, years)
    plan = draw_schedule(params, grid, companies, announced, rngs)
    terms = draw_terms(params, grid, companies, closes, plan, rngs["terms"])
    in_shares = choose_payment(params, years, plan, terms, rngs["payment"])
    effects = announcement_effects(params, companies, years, plan, terms, in_shares, rngs["effect"])
    returns = plant_events(params, grid, companies, plan, effects, base, rngs["effect"])
    volumes = draw_volumes(grid, companies, plan, rngs["volume"])
    return World(
        grid,
        factors,
        companies,
        years,
        announced,
        plan,
        terms,
        in_shares,
        effects,
        returns,
        volumes,
    )


def tables(params: Parameters, world: World) -> dict[str, pd.DataFrame]:
    """The five tables of a simulated world, keyed by file stem. Raises nothing."""
    grid, companies, years, plan = world.grid, world.companies, world.years, world.plan
    return {
        "deals": deal_table(grid, companies, years, plan, world.terms, world.in_shares),
        "prices": price_table(params, grid, companies, plan, world.returns, world.volumes),
        "benchmarks": benchmark_table(grid, world.factors),
        "factors": factor_table(grid, world.factors),
        "candidates": candidate_table(grid, companies, years, world.announced, plan),
    }


def write_all(out: Path, params: Parameters, seed: int) -> None:
    """Write all files of the demo into `out`, made if missing. OSError if it cannot be."""
    world = simulate(params, seed)
    frames = tables(params, world)
    out.mkdir(parents=True, exist_ok=True)
    write_deals(frames.pop("deals"), out / "deals.xlsx")
    for stem, frame in frames.items():
        write_parquet(frame, out / f"{stem}.parquet")
    truth = truth_record(params, seed, world.grid, world.companies, world.plan)
    text = json.dumps(truth, indent=1, ensure_ascii=True)
    (out / "truth.json").write_text(text + "\n", encoding="utf-8", newline="\n")


def main(arguments: list[str] | None = None) -> int:
    """Command line entry. Returns 0; argparse exits with 2 on a wrong option."""
    parser = argparse.ArgumentParser(description="Write the demo data.")
    parser.add_argument("--out", type=Path, help="folder to write to (default: this folder)")
    parser.add_argument(
        "--weak-instruments",
        action="store_true",
        help="the same draws, with instruments that hardly move payment",
    )
    parser.add_argument("--seed", type=int, default=DEFAULT_SEED, help="seed of all draws")
    options = parser.parse_args(arguments)
    if options.seed < 0:
        parser.error("--seed must not be negative")
    changed = options.weak_instruments or options.seed != DEFAULT_SEED
    if changed and options.out is None:
        parser.error("a variant of the data needs --out, to keep the standard files")
    params = weakened(Parameters()) if options.weak_instruments else Parameters()
    write_all(options.out or HERE, params, options.seed)
    return 0


if __name__ == "__main__":
    raise SystemExit(main())
