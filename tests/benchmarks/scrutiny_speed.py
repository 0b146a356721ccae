"""Seconds for a specification grid of 2,000 cells and for every sensitivity of 500 deals.

Rerun with ``python -m tests.benchmarks.scrutiny_speed`` from the project's top level. Writes
``tests/benchmarks/figures/scrutiny_speed.json``. One process; the best of three runs. Wall
clock: run it on an idle machine.
"""

from __future__ import annotations

import json
import platform
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np

from pipeline.core.design import Design, FitOptions
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.least_squares import fixed_effects, ols
from pipeline.scrutiny import curve, grid
from pipeline.scrutiny.options import ScrutinyOptions
from pipeline.scrutiny.scrutinise import scrutinise
from tests.estimators.designs import deals, one_cluster_dimension, without

FIGURES = Path(__file__).parent / "figures" / "scrutiny_speed.json"
OPTIONS = FitOptions(cluster=True)


def five_hundred() -> Design:
    """500 deals with effects, clusters, two instruments and twelve controls."""
    whole = one_cluster_dimension(without(deals(candidates=1200), "selection"))
    keep = slice(0, 500)
    rng = np.random.default_rng(1)
    more = rng.normal(size=(500, 9))
    return replace(
        whole,
        y=whole.y[keep],
        X=np.column_stack([whole.X[keep], more]),
        names=(*whole.names, *(f"control {at}" for at in range(9))),
        Z=whole.Z[keep],
        rows=whole.rows[keep],
        effects={name: codes[keep] for name, codes in whole.effects.items()},
        clusters={name: codes[keep] for name, codes in whole.clusters.items()},
    )


def two_thousand(design: Design) -> grid.Choices:
    """5 windows × 4 models × 10 control sets × 5 tails × 2 estimators."""
    rng = np.random.default_rng(2)
    controls = design.names[2:]
    return grid.Choices(
        outcomes={
            f"window {w}, model {m}": design.y + 0.01 * rng.normal(size=design.n)
            for w in range(5)
            for m in range(4)
        },
        controls={
            "all": controls,
            **{f"without {c}": tuple(x for x in controls if x != c) for c in controls[:9]},
        },
        winsorise={f"{share:g}": share for share in (0.0, 0.01, 0.02, 0.05, 0.1)},
        estimators={"least squares": "ols", "within": "fixed_effects"},
    )


def best(run: Callable[[], object]) -> float:
    """Least seconds of three runs."""
    seconds = []
    for _ in range(3):
        begin = time.perf_counter()
        run()
        seconds.append(time.perf_counter() - begin)
    return round(min(seconds), 3)


def measure() -> dict[str, object]:
    """The figures."""
    design = five_hundred()
    choices = two_thousand(design)
    found = grid.specification_grid(design, choices, OPTIONS)
    told = curve.summary(found)
    columns = tuple(
        fit(design, FitOptions()) for fit in (ols, fixed_effects, two_stage_least_squares)
    )
    every = ScrutinyOptions(reliability={"run_up": 0.9}, simex=True, reverse=("run_up",))
    instrumented = replace(
        choices, estimators={"two stages": "two_stage_least_squares", "within": "fixed_effects"}
    )
    return {
        "made_by": "python -m tests.benchmarks.scrutiny_speed",
        "python": platform.python_version(),
        "deals": design.n,
        "cells": len(found.cells),
        "seconds": {
            "grid": best(lambda: grid.specification_grid(design, choices, OPTIONS)),
            "grid, half of it two stages": best(
                lambda: grid.specification_grid(design, instrumented, OPTIONS)
            ),
            "grid, 499 permutations": best(lambda: curve.with_permutations(found, told, 499, 1)),
            "grid, Romano-Wolf of 1,999": best(lambda: curve.adjusted_cells(found, 1999, 1)),
            "scrutiny, as the flow asks it": best(
                lambda: scrutinise(design, columns, 2, ScrutinyOptions())
            ),
            "scrutiny, everything": best(lambda: scrutinise(design, columns, 2, every)),
        },
    }


def main() -> None:
    FIGURES.write_text(json.dumps(measure(), indent=1) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
