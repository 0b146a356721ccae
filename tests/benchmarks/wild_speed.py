"""Seconds of 99,999 wild cluster bootstrap draws, ours beside pyfixest's and a refit loop.

Rerun with ``python -m tests.benchmarks.wild_speed`` from the project's top level, BLAS on one
thread. Writes ``tests/benchmarks/figures/wild_speed.json``. All three run in one process on the
same data, 1,000 deals in 50 clusters and five regressors; the first round, in which pyfixest
compiles, is not counted and the fastest of five others is, of processor time on one thread, which
other work on the machine moves little. pyfixest is not needed to run the
package: without it its row is left out. The refit loop runs 2,000 draws and its row is scaled to
99,999, as it says.
"""

from __future__ import annotations

import json
import os
import time
from collections.abc import Callable
from importlib import metadata
from pathlib import Path

for _name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "NUMBA_NUM_THREADS"):
    os.environ.setdefault(_name, "1")

import numpy as np  # noqa: E402
import pandas as pd  # noqa: E402

from pipeline.core.design import Design  # noqa: E402
from pipeline.estimators import wild  # noqa: E402
from pipeline.estimators.covariance import cluster_sums  # noqa: E402
from pipeline.estimators.errors import CLUSTER, ErrorRule  # noqa: E402
from pipeline.estimators.sample import plain  # noqa: E402

FIGURES = Path(__file__).parent / "figures" / "wild_speed.json"
GROUPS, N, LOOP = 50, 1_000, 2_000


def deals() -> Design:
    rng = np.random.default_rng(20260301)
    code = rng.integers(0, GROUPS, size=N)
    X = np.column_stack([np.ones(N), rng.normal(size=(N, 4))])
    y = 0.05 * X[:, 1] + 0.3 * rng.normal(size=GROUPS)[code] + rng.normal(size=N)
    return Design(
        y=y,
        X=X,
        names=("constant", "treatment", "a", "b", "c"),
        treatment="treatment",
        rows=tuple(map(str, range(N))),
        outcome="CAR",
        clusters={"firm": code},
    )


def fastest(run: Callable[[], float], rounds: int = 5) -> tuple[float, float]:
    """The shortest of ``rounds`` runs after one that does not count, and the p-value."""
    run()
    seconds = []
    for _ in range(rounds):
        begin = time.process_time()
        p = run()
        seconds.append(time.process_time() - begin)
    return min(seconds), p


def refit_loop(design: Design) -> float:
    """Every draw refitted on the rows with a ready projection: no library's overhead in it."""
    codes = design.clusters["firm"]
    bread = np.linalg.inv(design.X.T @ design.X)
    project = bread @ design.X.T
    others = np.delete(design.X, 1, axis=1)
    fitted = others @ np.linalg.lstsq(others, design.y)[0]
    left = design.y - fitted
    rng = np.random.default_rng(1)

    def t_of(y: np.ndarray) -> float:
        b = project @ y
        sums = cluster_sums(design.X * (y - design.X @ b)[:, None], codes) @ bread[:, 1]
        return abs(float(b[1])) / float(np.linalg.norm(sums))

    observed = t_of(design.y)
    signs = rng.choice([1.0, -1.0], size=(LOOP, GROUPS))
    return float(np.mean([t_of(fitted + left * v[codes]) >= observed for v in signs]))


def pyfixest_row(design: Design) -> dict[str, object] | None:
    try:
        import pyfixest
    except ImportError:
        return None
    frame = pd.DataFrame(design.X[:, 1:], columns=list(design.names[1:]))
    frame["y"], frame["firm"] = design.y, design.clusters["firm"]
    fit = pyfixest.feols("y ~ treatment + a + b + c", frame, vcov={"CRV1": "firm"})

    def run() -> float:
        found = fit.wildboottest(param="treatment", reps=wild.DRAWS, cluster="firm", seed=1)
        return float(found["Pr(>|t|)"])

    seconds, p = fastest(run)
    name = f"pyfixest {metadata.version('pyfixest')}, p-value"
    return {"what": name, "seconds": round(seconds, 4), "p": round(p, 5)}


def main() -> None:
    """Time all of them and write the figures."""
    design = deals()
    codes = design.clusters["firm"]
    sample = plain(design, ErrorRule(CLUSTER, dict(design.clusters), design.n))
    alone, p = fastest(lambda: wild.p_value(sample, design, codes))
    both, again = fastest(lambda: wild.bootstrap(sample, design, codes).p_value)
    loop, rough = fastest(lambda: refit_loop(design), rounds=1)
    scaled = loop * wild.DRAWS / LOOP
    rows: list[dict[str, object]] = [
        {"what": "ours, p-value", "seconds": round(alone, 4), "p": round(p, 5)},
        {"what": "ours, p-value and interval", "seconds": round(both, 4), "p": round(again, 5)},
        {"what": f"refit loop, scaled from {LOOP} draws", "seconds": round(scaled, 2), "p": rough},
    ]
    other = pyfixest_row(design)
    if other is not None:
        rows.append(other)
    for row in rows:
        row["times_ours"] = round(float(str(row["seconds"])) / alone, 1)
        row["draws"], row["clusters"], row["deals"] = wild.DRAWS, GROUPS, N
    FIGURES.write_text(json.dumps(rows, indent=1) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
