"""Seconds of 1,000 cluster bootstrap replications of the selection model, beside a refit loop.

Rerun with ``python -m tests.benchmarks.probit_speed`` from the project's top level, BLAS on one
thread. Writes ``tests/benchmarks/figures/probit_speed.json``. 50,000 candidates in 2,000
clusters, 12 regressors of announcing, 11 of the outcome. The loop draws clusters, writes the
rows out and refits with statsmodels, probit alone and both steps; it runs ``LOOP`` replications
between ours and its rows are scaled to 1,000, as they say. The fastest of ``ROUNDS``: seconds of
the wall clock, and of the processor where one process does the work, which other work on the
machine moves less. Ours runs with one process and with two, which are started before they are
timed, as an earlier stage of a run leaves them; the last line says what their start costs.
"""

from __future__ import annotations

import json
import os
import platform
import time
from collections.abc import Callable
from importlib import metadata
from pathlib import Path

for _name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS"):
    os.environ.setdefault(_name, "1")

import joblib  # noqa: E402
import numpy as np  # noqa: E402
import statsmodels.api as sm  # noqa: E402

from pipeline.core.design import Design, SelectionRows  # noqa: E402
from pipeline.estimators import batched_probit as batched  # noqa: E402
from pipeline.estimators import selection_bootstrap as ours  # noqa: E402
from pipeline.estimators.probit import Equation, fit_probit, mills  # noqa: E402

FIGURES = Path(__file__).parent / "figures" / "probit_speed.json"
A, Q, GROUPS, DRAWS, LOOP, ROUNDS, SEED = 50_000, 12, 2_000, 1_000, 12, 5, 20260301


def candidates() -> Design:
    rng = np.random.default_rng(SEED)
    W = np.column_stack([np.ones(A), rng.normal(size=(A, Q - 1))])
    gamma = np.append(np.zeros(1), np.full(Q - 1, 0.1))
    gamma[-1] = 0.5
    codes = rng.integers(0, GROUPS, size=A)
    v = rng.normal(size=A)
    chosen = W @ gamma + v > 0
    n = int(chosen.sum())
    row = np.full(A, -1)
    row[chosen] = np.arange(n)
    names = tuple(f"w{at}" for at in range(Q))
    y = W[chosen, :-1] @ np.full(Q - 1, 0.01) + 0.6 * v[chosen] + rng.normal(size=n)
    return Design(
        y=y,
        X=W[chosen, :-1],
        names=names[:-1],
        treatment="w1",
        rows=tuple(map(str, range(n))),
        outcome="CAR",
        selection=SelectionRows(W, names, (names[-1],), chosen, row, {"company": codes}),
    )


def loop(design: Design, *, both: bool) -> Callable[[], None]:
    """Replications drawn, written out and refitted one by one."""
    rows = design.selection
    assert rows is not None
    codes = rows.clusters["company"]
    y = np.zeros(A)
    y[rows.selected] = design.y
    target = rows.selected.astype(float)
    rng = np.random.default_rng(1)

    def run() -> None:
        for _ in range(LOOP):
            times = np.bincount(rng.integers(0, GROUPS, GROUPS), minlength=GROUPS)
            drawn = np.repeat(np.arange(A), times[codes])
            W, chosen = rows.W[drawn], target[drawn]
            fit = sm.Probit(chosen, W).fit(disp=0)
            if both:
                here = chosen > 0
                ratio = mills(W[here] @ fit.params)
                sm.OLS(y[drawn][here], np.column_stack([W[here, :-1], ratio])).fit()

    return run


def probit_block(about: batched.Rows, seed: np.random.SeedSequence) -> np.ndarray:
    """Coefficients of a block of replications of the first step alone."""
    picks = np.random.default_rng(seed).integers(0, GROUPS, size=(ours.AT_ONCE, GROUPS))
    counts = np.column_stack([np.bincount(pick, minlength=GROUPS) for pick in picks])
    delta, settled = batched.fit_weighted(about, counts.astype(float))
    assert settled.all()
    return about.root @ delta


def main() -> None:
    """Time all of them in turn and write the figures."""
    design = candidates()
    rows = design.selection
    assert rows is not None
    equation = Equation(rows.selected, rows.W, rows.names, "announcing", rows.names[-1])
    first = fit_probit(equation)

    def both(workers: int) -> Callable[[], None]:
        return lambda: _use(
            ours.bootstrap_both_steps(design, rows, first, equation, DRAWS, SEED, workers)
        )

    def probit(workers: int) -> Callable[[], None]:
        def run() -> None:
            about = batched.rows_about(first, rows.W, rows.selected, rows.clusters["company"])
            seeds = np.random.SeedSequence(SEED).spawn(DRAWS // ours.AT_ONCE)
            work = (joblib.delayed(probit_block)(about, seed) for seed in seeds)
            _use(joblib.Parallel(n_jobs=workers)(work))

        return run

    begin = time.perf_counter()
    joblib.Parallel(n_jobs=2)(joblib.delayed(_warm)() for _ in range(4))
    start = time.perf_counter() - begin
    what: dict[str, tuple[Callable[[], None], float]] = {
        "probit, two processes": (probit(2), 1),
        "probit, one process": (probit(1), 1),
        f"probit, statsmodels loop, scaled from {LOOP}": (loop(design, both=False), DRAWS / LOOP),
        "both steps, two processes": (both(2), 1),
        "both steps, one process": (both(1), 1),
        f"both steps, statsmodels loop, scaled from {LOOP}": (
            loop(design, both=True),
            DRAWS / LOOP,
        ),
    }
    seconds = dict.fromkeys(what, (np.inf, np.inf))
    for _ in range(ROUNDS):
        for name, (run, scale) in what.items():
            begin, used = time.perf_counter(), time.process_time()
            run()
            now = (time.perf_counter() - begin, time.process_time() - used)
            wall, busy = (min(a, scale * b) for a, b in zip(seconds[name], now, strict=True))
            seconds[name] = wall, busy
    FIGURES.write_text(json.dumps(_figures(seconds, start), indent=1) + "\n", encoding="utf-8")


def _figures(seconds: dict[str, tuple[float, float]], start: float) -> dict[str, object]:
    table: list[dict[str, object]] = []
    for part in ("probit", "both steps"):
        rows = {name: s for name, s in seconds.items() if name.startswith(part)}
        slow = next(s for name, s in rows.items() if "loop" in name)
        for name, (wall, busy) in rows.items():
            row: dict[str, object] = {"what": name, "seconds": round(wall, 2)}
            row["times faster"] = round(slow[0] / wall, 1)
            if "two processes" not in name:
                row["processor seconds"] = round(busy, 2)
                row["times less processor"] = round(slow[1] / busy, 1)
            table.append(row)
    return {
        "rows": table,
        "start of two processes, seconds": round(start, 2),
        "replications": DRAWS,
        "candidates": A,
        "regressors": Q,
        "clusters": GROUPS,
        "cores": os.cpu_count(),
        "python": platform.python_version(),
        "versions": {name: metadata.version(name) for name in ("numpy", "scipy", "statsmodels")},
    }


def _use(_: object) -> None:
    """Take the result, so that it is made."""


def _warm() -> int:
    """Something that a new process must import the package for."""
    from pipeline.estimators import batched_probit

    return batched_probit.ROWS_AT_ONCE


if __name__ == "__main__":
    main()
