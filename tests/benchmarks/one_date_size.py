"""How often each test rejects at 5% with all deals on one date of real prices, nothing happening.

Each draw takes a random session out of twenty shares' prices, 1990 to 2022 (skfolio), and puts a
deal of every share on it: market model on [-250, -11], day 0 alone. Beside each test's rate stand
the share of draws in which the sample's own marks said that it holds, and its rate in those and in
the others. No other code has given these figures; the simulated ones of one date are in
``event_tests_size.json``. Run again from the project's folder, in about two minutes, with::

    python -m tests.benchmarks.one_date_size

which writes ``tests/benchmarks/figures/one_date_size.json``.
"""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np

from pipeline.core.estimate import TestResult
from pipeline.core.window import Window
from pipeline.registry import TABLE, TESTS, entry
from pipeline.significance.sample import CarSample, car_sample
from pipeline.significance.validity import Reasons
from tests.benchmarks.event_tests_size import LEVEL, real_prices, with_error
from tests.returns.panels import fitted

FIGURES = Path(__file__).with_name("figures") / "one_date_size.json"
DRAWS, SEED = 2_000, 20260301
ESTIMATION, DAY = Window(-250, -11), Window(0, 0)
QUICK = tuple(item.key for item in TABLE[TESTS] if not item.resamples)


def samples(draws: int, seed: int) -> list[CarSample]:
    """One sample a draw: every share, on one random session."""
    panel = real_prices()
    shares = np.arange(len(panel.securities))
    dates = np.random.default_rng(seed).integers(251, len(panel.sessions), draws)
    found = []
    for date in dates:
        position = np.full(len(shares), date)
        events = fitted("market_model", panel, shares, position, ESTIMATION, DAY)
        found.append(car_sample(events, DAY, 1.0))
    return found


def rates(drawn: list[CarSample]) -> dict[str, dict[str, object]]:
    """Each test's rate, how often it was said to hold, and its rate in those draws and the rest."""
    rejected: dict[str, list[bool]] = {}
    held: dict[str, list[bool]] = {}
    for sample in drawn:
        reasons = Reasons(sample)
        for key in QUICK:
            result = entry(TESTS, key).load()(sample)
            if isinstance(result, TestResult):
                rejected.setdefault(key, []).append(result.p_value < LEVEL)
                held.setdefault(key, []).append(not reasons.against(entry(TESTS, key).assumes))
    out: dict[str, dict[str, object]] = {}
    for key, values in rejected.items():
        hits, holds = np.array(values), np.array(held[key])
        out[key] = {
            **with_error(hits),
            "held": round(float(holds.mean()), 4),
            "where_it_held": with_error(hits[holds]) if holds.any() else None,
            "where_not": with_error(hits[~holds]) if (~holds).any() else None,
        }
    return out


def main() -> None:
    """Measure and write the figures."""
    figures = {
        "rerun": "python -m tests.benchmarks.one_date_size",
        "level": LEVEL,
        "draws": DRAWS,
        "seed": SEED,
        "rates": rates(samples(DRAWS, SEED)),
    }
    text = json.dumps(figures, indent=1)
    FIGURES.write_text(text + "\n", encoding="utf-8")
    print(text)


if __name__ == "__main__":
    main()
