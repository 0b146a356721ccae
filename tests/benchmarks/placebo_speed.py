"""Seconds of 1,000 placebo draws of 500 deals under five tests, ours beside two loops.

Rerun from the project's root, on a quiet machine, with the project installed:

    python -m tests.benchmarks.placebo_speed

Writes ``tests/benchmarks/figures/placebo_speed.json``. All work in one process on the same
invented panel. Ours makes all 1,000 draws: moved dates, market-model fits on 220 sessions and the
five tests of the mean. The loops are what an analyst writes: deal by deal a fit, a standardised
return and a row of ranks by ``scipy.stats.rankdata``, then the statistics of the draw. The numpy
loop fits by closed form and makes whole draws; the statsmodels loop slices a wide pandas frame and
fits OLS, and only a sample of fits is timed. Both are scaled to 1,000 draws, as their rows say;
neither measures how deals of one date move together, which ours does. ``greatest_difference`` is
that of the statistics between ours and the numpy loop. Peak memory is that of a process of its
own that makes the 1,000 draws, panel and interpreter included.
"""

from __future__ import annotations

import os
from collections.abc import Iterator
from itertools import islice
from pathlib import Path

for _name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS"):
    os.environ.setdefault(_name, "1")

import numpy as np  # noqa: E402
import pandas as pd  # noqa: E402
import statsmodels.api as sm  # noqa: E402
from scipy import stats  # noqa: E402

from pipeline.core.abnormal import AbnormalReturns  # noqa: E402
from pipeline.core.estimate import TestResult  # noqa: E402
from pipeline.core.prices import Floats, Integers, PricePanel  # noqa: E402
from pipeline.core.window import Window  # noqa: E402
from pipeline.registry import TESTS, entry  # noqa: E402
from pipeline.returns.expected import market_model  # noqa: E402
from pipeline.returns.measure import measure  # noqa: E402
from pipeline.returns.placebo import pseudo_events, without_announcements  # noqa: E402
from pipeline.significance.dependence import Links, links  # noqa: E402
from pipeline.significance.placebo import placebo_sizes  # noqa: E402
from pipeline.significance.sample import car_sample  # noqa: E402
from tests.benchmarks.fit_speed import ESTIMATION, SESSIONS, invented, peak, seconds, write  # noqa: E402

FIGURES = Path(__file__).parent / "figures" / "placebo_speed.json"
DRAWS, DEALS, WINDOW = 1_000, 500, Window(-1, 1)
KEYS = ("dependence_adjusted", "standardised", "cross_sectional", "patell", "rank")
# Sessions to either side of a real announcement whose returns take no part.
AROUND = 5
LOOP_DRAWS, LOOP_FITS, ROUNDS = 8, 300, 5
# Times a loop's speed at least, and MiB at most; limits of the project.
LIMITS = {"numpy": 20, "statsmodels": 300}
MEMORY_LIMIT = 1024
TESTED = {key: entry(TESTS, key).load() for key in KEYS}


def located_deals(panel: PricePanel) -> pd.DataFrame:
    """500 deals of 500 companies, on dates far enough from the panel's ends to be moved."""
    position = np.random.default_rng(5).integers(550, SESSIONS - 300, DEALS)
    return pd.DataFrame(
        {
            "deal_id": [f"D{at:03d}" for at in range(DEALS)],
            "security": list(panel.securities[:DEALS]),
            "exchange": panel.exchange,
            "column": np.arange(DEALS),
            "position": position,
            "day_zero": panel.sessions[position],
        }
    )


def known_links(panel: PricePanel, located: pd.DataFrame) -> Links:
    """The links among the deals on their own dates."""
    none = np.zeros((DEALS, len(ESTIMATION)), dtype=np.bool_)
    panels = {panel.exchange: panel}
    return links(measure("market_model", market_model, located, none, panels, ESTIMATION, WINDOW))


def samples(
    panel: PricePanel, located: pd.DataFrame, draws: int = DRAWS
) -> Iterator[tuple[Integers, AbnormalReturns]]:
    """The draws' abnormal returns."""
    return pseudo_events(
        "market_model",
        market_model,
        located,
        {panel.exchange: panel},
        ESTIMATION,
        WINDOW,
        draws=draws,
        distance=60,
        minimum_observations=100,
        seed=20260301,
        announced=located,
        around=AROUND,
    )


def ours(panel: PricePanel, located: pd.DataFrame, known: Links) -> pd.DataFrame:
    """Sizes of the five tests over 1,000 draws."""
    return placebo_sizes(samples(panel, located), WINDOW, TESTED, known, 0.01, 0.05)[0]


def numpy_loop(panel: PricePanel, where: list[tuple[np.ndarray, np.ndarray]]) -> Floats:
    """(draws, 4) statistics, one numpy fit and one row of ranks a deal.

    ``where`` holds the columns and the positions of the deals of each draw.
    """
    found = []
    length, width = len(ESTIMATION), len(WINDOW)
    for columns, positions in where:
        car, scar, free = [], [], []
        ranks = np.full((len(columns), length + width), np.nan)
        for row, (column, at) in enumerate(zip(columns, positions, strict=True)):
            before = slice(at + ESTIMATION.start, at + ESTIMATION.end + 1)
            inside = slice(at + WINDOW.start, at + WINDOW.end + 1)
            y, x = panel.returns[before, column], panel.benchmark[before]
            kept = np.isfinite(y)
            y, x, m = y[kept], x[kept], int(kept.sum())
            moved = x - x.mean()
            spread = moved @ moved
            beta = (moved @ y) / spread
            alpha = y.mean() - beta * x.mean()
            left = y - alpha - beta * x
            abnormal = panel.returns[inside, column] - alpha - beta * panel.benchmark[inside]
            far = (panel.benchmark[inside] - x.mean()).sum()
            variance = (left @ left) / (m - 2) * (width + width**2 / m + far**2 / spread)
            car.append(abnormal.sum())
            scar.append(abnormal.sum() / np.sqrt(variance))
            free.append(m - 2)
            rank = stats.rankdata(np.concatenate([left, abnormal])) / (m + width + 1) - 0.5
            ranks[row, :length][kept], ranks[row, length:] = rank[:m], rank[m:]
        found.append(_statistics(np.array(car), np.array(scar), np.array(free), ranks))
    return np.array(found)


def _statistics(car: Floats, scar: Floats, free: Integers, ranks: Floats) -> list[float]:
    n, width = len(car), len(WINDOW)
    mean, weight = np.nanmean(ranks, axis=0), np.isfinite(ranks).mean(axis=0)
    ranked = mean[-width:].sum() / np.sqrt(width * (weight * mean**2).mean())
    return [
        float(np.sqrt(n) * scar.mean() / scar.std(ddof=1)),
        float(np.sqrt(n) * car.mean() / car.std(ddof=1)),
        float(scar.sum() / np.sqrt((free / (free - 2)).sum())),
        float(ranked),
    ]


def statsmodels_loop(
    wide: pd.DataFrame, market: pd.Series, columns: Integers, positions: Integers
) -> None:
    """The work of the numpy loop on single deals, by pandas slices and statsmodels."""
    for column, at in zip(columns, positions, strict=True):
        before = slice(at + ESTIMATION.start, at + ESTIMATION.end + 1)
        inside = slice(at + WINDOW.start, at + WINDOW.end + 1)
        share = wide.iloc[:, column]
        x = sm.add_constant(market.iloc[before])
        fit = sm.OLS(share.iloc[before], x, missing="drop").fit()
        ahead = sm.add_constant(market.iloc[inside], has_constant="add")
        abnormal = share.iloc[inside] - fit.predict(ahead)
        stats.rankdata(np.concatenate([fit.resid, abnormal]))


def draws_of_the_loop(
    panel: PricePanel, located: pd.DataFrame
) -> tuple[list[tuple[np.ndarray, np.ndarray]], Floats]:
    """Columns and positions of the first draws, and our four statistics on them."""
    where, ours_there = [], []
    known = known_links(panel, located)
    for rows, drawn in islice(samples(panel, located), LOOP_DRAWS):
        positions = np.searchsorted(panel.sessions, drawn.days[:, -WINDOW.start])
        where.append((located["column"].to_numpy()[rows], positions))
        sample = car_sample(drawn, WINDOW, 1.0, known.take(rows))
        results = [TESTED[key](sample) for key in KEYS[1:]]
        ours_there.append([item.statistic for item in results if isinstance(item, TestResult)])
    return where, np.array(ours_there)


def alone() -> None:
    """Make all draws."""
    panel = invented()
    located = located_deals(panel)
    ours(panel, located, known_links(panel, located))


def main() -> None:
    """Measure and write the figures."""
    panel = invented()
    located = located_deals(panel)
    known = known_links(panel, located)
    where, statistics = draws_of_the_loop(panel, located)
    quiet = without_announcements({panel.exchange: panel}, located, AROUND)[panel.exchange]
    apart = np.abs(numpy_loop(quiet, where) - statistics).max()
    wide, market = pd.DataFrame(quiet.returns), pd.Series(panel.benchmark, name="market")
    some = [each[:LOOP_FITS] for each in where[0]]
    times: dict[str, list[float]] = {"ours": [], "numpy": [], "statsmodels": []}
    for _ in range(ROUNDS):
        times["ours"].append(seconds(lambda: ours(panel, located, known)))
        spent = seconds(lambda: numpy_loop(quiet, where))
        times["numpy"].append(spent * DRAWS / LOOP_DRAWS)
        spent = seconds(lambda: statsmodels_loop(wide, market, *some))
        times["statsmodels"].append(spent / LOOP_FITS * DEALS * DRAWS)
    best = {name: min(values) for name, values in times.items()}
    figures: dict[str, object] = {
        "draws": DRAWS,
        "deals": DEALS,
        "tests": KEYS,
        "ours_seconds": round(best["ours"], 2),
        "numpy_loop_seconds": round(best["numpy"], 1),
        "numpy_loop_scaled_from_draws": LOOP_DRAWS,
        "statsmodels_loop_seconds": round(best["statsmodels"]),
        "statsmodels_loop_scaled_from_fits": LOOP_FITS,
        "times_faster": {name: round(best[name] / best["ours"], 1) for name in LIMITS},
        "limit_times_faster": LIMITS,
        "greatest_difference": float(f"{apart:.1e}"),
        "peak_mebibytes": peak("placebo_speed"),
        "limit_mebibytes": MEMORY_LIMIT,
    }
    write(FIGURES, figures)


if __name__ == "__main__":
    main()
