"""Microseconds an event of the fitting engine, beside one statsmodels regression an event.

Rerun from the project's root, on a quiet machine, with the project installed:

    python -m tests.benchmarks.fit_speed

Writes ``tests/benchmarks/figures/fit_speed.json``. All work in one process on the same invented
panel (2,000 securities, 2,520 sessions), turn about, 100 events a round of a loop; the shortest
round counts, in processor seconds of one thread, which on a quiet machine are the clock's.

The loop is what an analyst writes: slices of a wide pandas frame, a constant added, statsmodels
OLS without the missing rows. Two more stand beside it: the regression alone on a ready table that
has its constant, and the whole work with rows joined by date and abnormal returns predicted. Ours
fits 10,000 and 100,000 events (220 sessions each) and makes the abnormal returns of 21 event days
with their forecast errors, which only the last loop makes in part. The greatest relative
difference is that of alpha, beta and sigma from the loop's. Peak memory is that of a process of
its own that fits 100,000 events, panel and interpreter included.
"""

from __future__ import annotations

import json
import os
import platform
import subprocess
import sys
import time
from collections.abc import Callable
from functools import partial
from pathlib import Path

for _name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS"):
    os.environ.setdefault(_name, "1")

import numpy as np  # noqa: E402
import pandas as pd  # noqa: E402
import statsmodels  # noqa: E402
import statsmodels.api as sm  # noqa: E402

from pipeline.core.abnormal import AbnormalReturns  # noqa: E402
from pipeline.core.prices import Floats, PricePanel  # noqa: E402
from pipeline.core.window import Window  # noqa: E402
from pipeline.registry import EXPECTED_RETURNS, entry  # noqa: E402
from pipeline.returns.fit import Events, fit_events  # noqa: E402

FIGURES = Path(__file__).parent / "figures" / "fit_speed.json"
SECURITIES, SESSIONS = 2_000, 2_520
ESTIMATION, SPAN = Window(-250, -31), Window(-10, 10)
FACTORS = ("market", "size", "value", "momentum")
LOOP, ROUNDS = 100, 8
SIZES = (10_000, 100_000)
# Runs of ours one after another in a round: memory that a virtual machine gave back to its host
# in between costs more to touch than the fit itself.
REPEATS = 3
# Times the loop's speed at least; limits of the project.
LIMITS = {"market_model": 800, "factor_model": 250}
MEMORY_LIMIT = 1024


def invented() -> PricePanel:
    """Shares that follow four factors, every session quoted."""
    stream = np.random.default_rng(20260301)
    moves = {name: stream.normal(0.0003, 0.01, SESSIONS) for name in FACTORS}
    returns = stream.normal(0, 0.02, (SECURITIES, SESSIONS))
    returns += stream.normal(1, 0.4, (SECURITIES, 1)) * moves["market"]
    days = np.busday_offset(np.datetime64("2010-01-04", "D"), np.arange(SESSIONS), roll="forward")
    # Closes and volumes take no part in the fit.
    return PricePanel(
        exchange="XLON",
        sessions=days,
        securities=tuple(f"S{at:04d}" for at in range(SECURITIES)),
        close=returns.T,
        volume=returns.T,
        returns=returns.T,
        benchmark=moves["market"],
        factors=moves,
    )


def invented_events(n: int) -> Events:
    """n events at random, in the order of the columns."""
    stream = np.random.default_rng(7)
    column = np.sort(stream.integers(0, SECURITIES, n))
    position = stream.integers(-ESTIMATION.start, SESSIONS - SPAN.end, n)
    return Events(column, position, np.zeros((n, len(ESTIMATION)), dtype=np.bool_))


def ours(model: str, panel: PricePanel, events: Events) -> AbnormalReturns:
    """All events fitted by the engine."""
    made = entry(EXPECTED_RETURNS, model).load()(panel)
    deals = tuple(map(str, range(len(events.column))))
    return fit_events(model, deals, made, panel, events, ESTIMATION, SPAN)


def loop(wide: pd.DataFrame, factors: pd.DataFrame, events: Events, rows: range) -> Floats:
    """(n, d + 1) parameters and sigma, one statsmodels regression an event."""
    found = []
    for row in rows:
        at, name = int(events.position[row]), f"S{events.column[row]:04d}"
        window = slice(at + ESTIMATION.start, at + ESTIMATION.end + 1)
        x = sm.add_constant(factors.iloc[window])
        fit = sm.OLS(wide[name].iloc[window], x, missing="drop").fit()
        found.append([*fit.params, np.sqrt(fit.mse_resid)])
    return np.array(found)


def ready_loop(wide: pd.DataFrame, factors: pd.DataFrame, events: Events, rows: range) -> None:
    """The regression alone, on a table that has its constant."""
    design = sm.add_constant(factors)
    for row in rows:
        at, name = int(events.position[row]), f"S{events.column[row]:04d}"
        window = slice(at + ESTIMATION.start, at + ESTIMATION.end + 1)
        fit = sm.OLS(wide[name].iloc[window], design.iloc[window]).fit()
        _ = fit.params, fit.mse_resid


def whole_loop(wide: pd.DataFrame, factors: pd.DataFrame, events: Events, rows: range) -> None:
    """Rows joined by date, the regression, and the abnormal returns of the event days."""
    days = wide.index
    for row in rows:
        at, name = int(events.position[row]), f"S{events.column[row]:04d}"
        window = slice(days[at + ESTIMATION.start], days[at + ESTIMATION.end])
        joined = pd.concat([wide.loc[window, name], factors.loc[window]], axis=1).dropna()
        fit = sm.OLS(joined[name], sm.add_constant(joined[list(factors)])).fit()
        inside = slice(days[at + SPAN.start], days[at + SPAN.end])
        expected = fit.predict(sm.add_constant(factors.loc[inside]))
        _ = wide.loc[inside, name] - expected


LOOPS = {"the loop": loop, "regression alone": ready_loop, "joined and predicted": whole_loop}


def seconds(work: Callable[[], object]) -> float:
    """Processor seconds of one run; one thread, so those of the clock on a quiet machine."""
    begin = time.process_time()
    work()
    return time.process_time() - begin


def compared(model: str, panel: PricePanel) -> dict[str, object]:
    """All of them turn about, and how far their numbers lie apart."""
    names = FACTORS if model == "factor_model" else FACTORS[:1]
    factors = pd.DataFrame({name: panel.factors[name] for name in names}, index=panel.sessions)
    wide = pd.DataFrame(panel.returns, index=panel.sessions, columns=list(panel.securities))
    events = {n: invented_events(n) for n in SIZES}
    some = events[SIZES[0]]
    times: dict[str, list[float]] = {name: [] for name in (*LOOPS, *map(str, SIZES))}
    for at in range(ROUNDS):
        rows = range(at * LOOP, (at + 1) * LOOP)
        for name, run in LOOPS.items():
            times[name].append(seconds(partial(run, wide, factors, some, rows)) / LOOP)
        for n in SIZES:
            fit = partial(ours, model, panel, events[n])
            times[str(n)] += [seconds(fit) / n for _ in range(REPEATS)]
    found, known = ours(model, panel, some), loop(wide, factors, some, range(LOOP))
    mine = np.column_stack([found.parameters, np.sqrt(found.residual_variance)])[:LOOP]
    apart = np.abs(mine - known) / np.abs(known)
    best = {name: min(values) * 1e6 for name, values in times.items()}
    return {
        "model": model,
        "events_of_each_loop": LOOP * ROUNDS,
        "loop_microseconds_an_event": {name: round(best[name]) for name in LOOPS},
        "ours_microseconds_an_event": {n: round(best[str(n)], 2) for n in SIZES},
        "times_faster": {
            name: {n: round(best[name] / best[str(n)]) for n in SIZES} for name in LOOPS
        },
        "limit_times_faster_than_the_loop": LIMITS[model],
        "greatest_relative_difference": float(f"{apart.max():.1e}"),
    }


def peak(module: str) -> int:
    """MiB at the most of a process that does a benchmark's work alone."""
    code = f"""
import resource
from tests.benchmarks import {module}
{module}.alone()
print(round(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024))
"""
    done = subprocess.run([sys.executable, "-c", code], check=True, capture_output=True, text=True)
    return int(done.stdout)


def alone() -> None:
    """Fit the market model to 100,000 events."""
    ours("market_model", invented(), invented_events(SIZES[-1]))


def write(path: Path, figures: dict[str, object]) -> None:
    """Write the figures under how to make them again and what they were made on."""
    facts = {
        "rerun": f"python -m tests.benchmarks.{path.stem}",
        "python": platform.python_version(),
        "numpy": np.__version__,
        "statsmodels": statsmodels.__version__,
        "cores": os.cpu_count(),
    }
    text = json.dumps({**facts, **figures}, indent=2)
    path.write_text(text + "\n", encoding="utf-8")
    print(text)


def main() -> None:
    """Measure and write the figures."""
    panel = invented()
    figures: dict[str, object] = {
        "estimation_sessions": len(ESTIMATION),
        "event_days": len(SPAN),
        "models": [compared(model, panel) for model in LIMITS],
        "peak_mebibytes_at_100000_events": peak("fit_speed"),
        "limit_mebibytes": MEMORY_LIMIT,
    }
    write(FIGURES, figures)


if __name__ == "__main__":
    main()
