"""How often several windows, portfolios in calendar time, one date's system and buy-and-hold
comparisons reject at 5% when nothing happened, and how often they find something.

Four simulated worlds of normal residuals. *Windows*: 50 deals, one headline and four secondary
windows; the family-wise rate is the share of samples in which any secondary window is significant.
*Calendar time*: 60 companies held for 60 sessions, half of the deals inside 100 of 1,000 sessions,
where any two companies' residuals are correlated; beside it the t of the deals' own 60-session
returns, which takes them as independent. *One date*: all deals on one day, residuals correlated.
*Buy-and-hold*: lognormal returns of 250 sessions against one matched company each.

Rates come with their Monte-Carlo standard errors. Run again from the project's folder, in about
ten minutes, with::

    python -m tests.benchmarks.event_models_size

which writes ``tests/benchmarks/figures/event_models_size.json``.
"""

from __future__ import annotations

import json
from collections.abc import Callable, Mapping
from pathlib import Path

import numpy as np
import pandas as pd

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.estimate import TestResult
from pipeline.core.prices import Floats, PricePanel
from pipeline.core.window import Window
from pipeline.registry import TESTS, entry
from pipeline.significance.buy_and_hold import buy_and_hold
from pipeline.significance.calendar_time import CalendarTimeOptions, calendar_time
from pipeline.significance.sample import car_sample
from pipeline.significance.several_windows import several_windows
from tests.benchmarks.event_tests_size import with_error
from tests.returns.panels import fitted, panel_of_returns, weekdays

FIGURES = Path(__file__).with_name("figures") / "event_models_size.json"
REPLICATIONS = 2000
LEVEL = 0.05
SEED = 20260301
ESTIMATION, SPAN = Window(-140, -21), Window(-5, 5)
WINDOWS = (Window(-1, 1), Window(0, 0), Window(0, 1), Window(-2, 2), Window(-5, 5))
HORIZON = 60
Rates = dict[str, dict[str, float]]


def rates_of(one: Callable[[np.random.Generator], Mapping[str, bool]], seed: int) -> Rates:
    """Shares of ``one`` over the replications, by name."""
    stream = np.random.default_rng(seed)
    hits: dict[str, list[bool]] = {}
    for _ in range(REPLICATIONS):
        for name, rejected in one(stream).items():
            hits.setdefault(name, []).append(rejected)
    return {name: with_error(np.array(values)) for name, values in hits.items()}


def residuals(stream: np.random.Generator, shape: tuple[int, int], correlation: float) -> Floats:
    """(T, S) standard normal, any two columns correlated on a day."""
    common = np.sqrt(correlation) * stream.normal(size=(shape[0], 1))
    return common + np.sqrt(1 - correlation) * stream.normal(size=shape)


def drawn(
    stream: np.random.Generator, n: int, dates: int, correlation: float, effect: float = 0.0
) -> AbnormalReturns:
    """n deals on up to ``dates`` distinct sessions, their residuals correlated."""
    sessions = 6 * dates + 180
    position = 160 + 6 * stream.integers(0, dates, n)
    market = stream.normal(0, 0.01, sessions)
    noise = residuals(stream, (sessions, n), correlation) * stream.uniform(0.01, 0.03, n)
    returns = market[:, None] * stream.uniform(0.5, 1.5, n) + noise
    returns[position, np.arange(n)] += effect
    panel = panel_of_returns(weekdays(sessions), returns, market)
    return fitted("market_model", panel, np.arange(n), position, ESTIMATION, SPAN)


def windows_world(dates: int, correlation: float, effect: float = 0.0) -> Rates:
    """Any secondary window significant, unadjusted and adjusted; 499 resamples a draw."""

    def one(stream: np.random.Generator) -> Mapping[str, bool]:
        measured = drawn(stream, 50, dates, correlation, effect)
        frame = several_windows({"m": measured}, WINDOWS, 1.0, int(stream.integers(2**31)), 499)
        later = frame.iloc[1:]
        names = {"p_value": "unadjusted", "p_holm": "Holm", "p_romano_wolf": "Romano-Wolf"}
        return {words: bool(later[name].min() <= LEVEL) for name, words in names.items()}

    return rates_of(one, SEED)


def crowded(
    stream: np.random.Generator, correlation: float, drift: float
) -> tuple[PricePanel, pd.DataFrame]:
    """60 companies, half of their deals inside 100 sessions; ``drift`` a session after each."""
    n, sessions = 60, 1100
    early = stream.integers(1, 1000, n // 2)
    position = np.concatenate([early, stream.integers(400, 500, n - n // 2)])
    market = stream.normal(0.0003, 0.01, sessions)
    returns = market[:, None] * stream.uniform(0.5, 1.5, n)
    returns += 0.02 * residuals(stream, (sessions, n), correlation)
    for column, at in enumerate(position):
        returns[at + 1 : at + 1 + HORIZON, column] += drift
    deals = pd.DataFrame({"exchange": "XLON", "column": np.arange(n), "position": position})
    return panel_of_returns(weekdays(sessions), returns, market), deals


def calendar_world(correlation: float, drift: float = 0.0) -> Rates:
    """alpha of both regressions, and the t of the companies' own returns over the market."""
    options = CalendarTimeOptions((HORIZON,), fewest_holdings=3)

    def one(stream: np.random.Generator) -> Mapping[str, bool]:
        panel, deals = crowded(stream, correlation, drift)
        frame = calendar_time({"XLON": panel}, deals, options)
        p = dict(zip(frame["regression"], frame["p_value"], strict=True))
        over = np.array(
            [
                (panel.returns[at + 1 : at + 1 + HORIZON, column]
                 - panel.benchmark[at + 1 : at + 1 + HORIZON]).sum()
                for column, at in zip(deals["column"], deals["position"], strict=True)
            ]
        )  # fmt: skip
        t = over.mean() / (over.std(ddof=1) / np.sqrt(len(over)))
        rejected = {words: bool(value <= LEVEL) for words, value in p.items()}
        return {**rejected, "deals taken as independent": bool(abs(t) > 2.001)}

    return rates_of(one, SEED + 1)


def date_world(n: int, correlation: float, effect: float = 0.0) -> Rates:
    """The system of one date beside tests that take deals as independent, or know r alone."""
    keys = ("joint_date", "time_series", "dependence_adjusted", "standardised")
    tests = {key: entry(TESTS, key).load() for key in keys}

    def one(stream: np.random.Generator) -> Mapping[str, bool]:
        sample = car_sample(drawn(stream, n, 1, correlation, effect), Window(-1, 1), 1.0)
        made = {key: test(sample) for key, test in tests.items()}
        found = {k: r.p_value <= LEVEL for k, r in made.items() if isinstance(r, TestResult)}
        joint = made["joint_date"]
        if isinstance(joint, TestResult):
            found["each deal zero"] = joint.facts["each_zero_p"] <= LEVEL
        return found

    return rates_of(one, SEED + 2)


def holding_world(n: int, effect: float = 0.0) -> Rates:
    """A year's returns of both companies lognormal, deviations between 25% and 60%."""

    def one(stream: np.random.Generator) -> Mapping[str, bool]:
        spread = stream.uniform(0.25, 0.6, n)
        own, control = (np.expm1(stream.normal(0.08, spread)) for _ in range(2))
        own = own + effect
        frame = pd.DataFrame(
            {"window_start": 1, "window_end": 250, "own_return": own,
             "control_return": control, "bhar": own - control}
        )  # fmt: skip
        row = buy_and_hold(frame, 1 - LEVEL, int(stream.integers(2**31))).iloc[0]
        names = {"p_value": "t", "skewness_adjusted_p": "skewness-adjusted"}
        return {words: bool(row[name] <= LEVEL) for name, words in names.items()}

    return rates_of(one, SEED + 3)


def main() -> None:
    """Measure everything and write the figures."""
    worlds: dict[str, dict[str, Rates]] = {
        "several windows, any of four significant": {
            "50 deals on 300 dates": windows_world(300, 0.0),
            "50 deals on 12 dates, r = .2": windows_world(12, 0.2),
            "effect of 1%, 300 dates": windows_world(300, 0.0, 0.01),
        },
        "calendar time, 60 sessions": {
            "independent companies": calendar_world(0.0),
            "r = .1": calendar_world(0.1),
            "drift of 10 bp a session, r = .1": calendar_world(0.1, 0.001),
        },
        "one date": {
            "30 deals, r = .2": date_world(30, 0.2),
            "90 deals, r = .2": date_world(90, 0.2),
            "30 deals, r = .2, effect of 2%": date_world(30, 0.2, 0.02),
        },
        "buy-and-hold over a matched company": {
            "50 deals": holding_world(50),
            "200 deals": holding_world(200),
            "200 deals, effect of 10%": holding_world(200, 0.10),
        },
    }
    figures = {"level": LEVEL, "replications": REPLICATIONS, "seed": SEED, "rates": worlds}
    FIGURES.parent.mkdir(exist_ok=True)
    FIGURES.write_text(json.dumps(figures, indent=1) + "\n", encoding="utf-8")
    for kind, cases in worlds.items():
        for name, rates in cases.items():
            shown = "  ".join(f"{key} {item['rate']:.3f}" for key, item in rates.items())
            print(f"{kind}: {name}: {shown}")


if __name__ == "__main__":
    main()
