"""How often each test of the mean abnormal return rejects at 5%, with and without an effect.

Two worlds. *Simulated*: 50 deals, market model on 120 sessions, window [-1, +1], normal
residuals whose standard deviations differ between companies. *Real prices*: random shares and
dates out of twenty shares, 1990 to 2022 (skfolio), day 0 alone; the figures that other code gave
for the same draws, and their bands, are in ``tests/reference/events.json``.

Rates come with their Monte-Carlo standard errors. Run again from the project's folder, in about
ten minutes, with::

    python -m tests.benchmarks.event_tests_size

which writes ``tests/benchmarks/figures/event_tests_size.json``.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.estimate import TestResult
from pipeline.core.prices import Floats, Integers, PricePanel
from pipeline.core.window import Window
from pipeline.registry import TABLE, TESTS, entry
from pipeline.significance.dependence import Dependence
from pipeline.significance.sample import CarSample, Series, car_sample
from tests.returns.panels import fitted, panel_of_closes, panel_of_returns, weekdays

FIGURES = Path(__file__).with_name("figures") / "event_tests_size.json"
REPLICATIONS = 2000
LEVEL = 0.05
SEED = 20260301
ALONE = Dependence(np.nan, 0.0, 0, 0.0, np.nan, 0, 0)
KEYS = {
    "cross_t": "cross_sectional",
    "patell": "patell",
    "bmp": "standardised",
    "crude_dep": "time_series",
    "corrado": "rank",
    "gsign": "generalised_sign",
}


@dataclass(frozen=True, slots=True)
class World:
    """One simulated situation.

    ``dates`` is how many sessions the announcements spread over (1: all on one day);
    ``correlation`` that of any two companies' residuals on a day; ``variance`` multiplies the
    residual variance inside the window; ``effect`` is added to day 0, decimal; ``skewed`` residuals
    are exponential instead of normal.
    """

    dates: int = 400
    correlation: float = 0.0
    variance: float = 1.0
    effect: float = 0.0
    deals: int = 50
    skewed: bool = False


WORLDS = {
    "null": World(),
    "event variance x2": World(variance=2.0),
    "event variance x4": World(variance=4.0),
    "same day, r = .1": World(dates=1, correlation=0.1),
    "same day, r = .1, event variance x2": World(dates=1, correlation=0.1, variance=2.0),
    "within 40 sessions, r = .1": World(dates=40, correlation=0.1),
    "skewed residuals": World(skewed=True),
    "effect of 0.5%": World(effect=0.005),
    "effect of 1%": World(effect=0.01),
    "effect of 1%, same day, r = .1": World(dates=1, correlation=0.1, effect=0.01),
}
ESTIMATION, WINDOW = Window(-140, -21), Window(-1, 1)


def simulated(world: World, stream: np.random.Generator) -> AbnormalReturns:
    """Abnormal returns of one draw of a world."""
    n = world.deals
    sessions = world.dates + len(ESTIMATION) + 24
    position = stream.integers(0, world.dates, n) + len(ESTIMATION) + 21
    deviation = stream.uniform(0.01, 0.03, n)
    market = stream.normal(0.0003, 0.01, sessions)
    common = stream.normal(size=(sessions, 1))
    shape = (sessions, n)
    own = stream.exponential(size=shape) - 1 if world.skewed else stream.normal(size=shape)
    noise = np.sqrt(world.correlation) * common + np.sqrt(1 - world.correlation) * own
    for day in range(WINDOW.start, WINDOW.end + 1):
        noise[position + day, np.arange(n)] *= np.sqrt(world.variance)
    returns = market[:, None] * stream.uniform(0.5, 1.5, n) + noise * deviation
    returns[position, np.arange(n)] += world.effect
    panel = panel_of_returns(weekdays(sessions), returns, market)
    return fitted("market_model", panel, np.arange(n), position, ESTIMATION, WINDOW)


def simulated_rates(world: World, replications: int, seed: int) -> dict[str, dict[str, float]]:
    """Rejection rate of every registered test that applies to many deals."""
    stream = np.random.default_rng(seed)
    tests = {item.key: item.load() for item in TABLE[TESTS]}
    hits: dict[str, list[bool]] = {}
    for _ in range(replications):
        sample = car_sample(simulated(world, stream), WINDOW, 1.0)
        for key, test in tests.items():
            found = test(sample)
            if isinstance(found, TestResult):
                hits.setdefault(key, []).append(found.p_value < LEVEL)
    return {key: with_error(np.array(rejected)) for key, rejected in hits.items()}


def with_error(rejected: np.ndarray) -> dict[str, float]:
    """A rate and its Monte-Carlo standard error."""
    rate = float(rejected.mean())
    error = float(np.sqrt(rate * (1 - rate) / len(rejected)))
    return {"rate": round(rate, 4), "standard_error": round(error, 4)}


def real_prices() -> PricePanel:
    """Twenty shares and their index as skfolio carries them."""
    from skfolio.datasets import load_sp500_dataset, load_sp500_index

    shares = load_sp500_dataset()
    days = shares.index.to_numpy().astype("datetime64[D]")
    level = load_sp500_index().iloc[:, 0].to_numpy(float)
    return panel_of_closes(days, list(shares.columns), shares.to_numpy(float), level)


def drawn(panel: PricePanel, deals: int, replications: int, seed: int) -> AbnormalReturns:
    """Day 0 of ``replications`` times ``deals`` random events; draws follow one another."""
    stream = np.random.default_rng(seed)
    n = deals * replications
    column: Integers = stream.integers(0, len(panel.securities), n)
    position: Integers = stream.integers(251, len(panel.sessions), n)
    return fitted("market_model", panel, column, position, Window(-250, -11), Window(0, 0))


def drawn_rates(
    events: AbnormalReturns, deals: int, effect: float = 0.0, variance: float = 1.0
) -> dict[str, float]:
    """Rejection rates of the tests that treat deals as independent, one sample a draw.

    ``effect`` is added to each abnormal return, and their variance multiplied.
    """
    day = Window(0, 0)
    car: Floats = events.car(day) * np.sqrt(variance) + effect
    residual_sd = np.sqrt(events.residual_variance)
    std_dev = np.sqrt(events.car_variance(day))
    df = events.degrees_of_freedom
    hits: dict[str, list[bool]] = {key: [] for key in KEYS}
    for at in range(0, len(car), deals):
        own = slice(at, at + deals)
        scar = car[own] / std_dev[own]
        series = Series(
            car[own][:, None],
            events.estimation_returns[own],
            residual_sd[own],
        )
        sample = CarSample(day, car[own], scar, std_dev[own], df[own], ALONE, series)
        for key, name in KEYS.items():
            found = entry(TESTS, name).load()(sample)
            hits[key].append(found.p_value < LEVEL)
    return {key: float(np.mean(rejected)) for key, rejected in hits.items()}


REAL = {
    "null_random_N20": (20, 0.0, 1.0),
    "null_random_N50": (50, 0.0, 1.0),
    "null_random_N100": (100, 0.0, 1.0),
    "power_+1pct_N50": (50, 0.01, 1.0),
    "power_+0.5pct_N50": (50, 0.005, 1.0),
    "var_x2_N50": (50, 0.0, 2.0),
    "var_x4_N50": (50, 0.0, 4.0),
}


def references() -> Mapping[str, Any]:
    """The rates that other code gave, by situation and test."""
    path = Path(__file__).parents[1] / "reference" / "events.json"
    cases = json.loads(path.read_text())["cases"]
    return {**cases["size_random_dates"]["expected"], **cases["size_event_variance"]["expected"]}


def real_rates(replications: int) -> dict[str, dict[str, dict[str, object]]]:
    """Rates on real prices beside the bands of the reference."""
    panel, known = real_prices(), references()
    out: dict[str, dict[str, dict[str, object]]] = {}
    for name, (deals, effect, variance) in REAL.items():
        events = drawn(panel, deals, replications, SEED)
        rates = drawn_rates(events, deals, effect, variance)
        out[name] = {}
        for key, rate in rates.items():
            low, high = known[f"{name}.{key}"]["mc_band_4se"]
            error = np.sqrt(rate * (1 - rate) / replications)
            out[name][KEYS[key]] = {
                "rate": round(rate, 4),
                "standard_error": round(float(error), 4),
                "band": [low, high],
                "inside": bool(low <= rate <= high),
            }
    return out


def main() -> None:
    """Measure everything and write the figures."""
    figures = {
        "level": LEVEL,
        "replications": REPLICATIONS,
        "seed": SEED,
        "simulated": {
            name: simulated_rates(world, REPLICATIONS, SEED + at)
            for at, (name, world) in enumerate(WORLDS.items())
        },
        "real_prices": real_rates(REPLICATIONS),
    }
    FIGURES.parent.mkdir(exist_ok=True)
    FIGURES.write_text(json.dumps(figures, indent=1) + "\n", encoding="utf-8")
    for world in ("simulated", "real_prices"):
        for name, rates in figures[world].items():  # type: ignore[attr-defined]
            shown = "  ".join(f"{key} {item['rate']:.3f}" for key, item in rates.items())
            print(f"{name:<38}{shown}")


if __name__ == "__main__":
    main()
