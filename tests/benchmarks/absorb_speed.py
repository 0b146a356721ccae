"""Seconds of three absorbed effects with two-way clusters, beside linearmodels and pyfixest.

Rerun with ``python -m tests.benchmarks.absorb_speed`` from the project's top level, BLAS on one
thread. Writes ``tests/benchmarks/figures/absorb_speed.json``. Both run in one process on the same
100,000 deals and five regressors, in turns; the first round does not count and the fastest of
three others is taken, of processor time, which other work on the machine moves little. "Even": the
levels of the effects are equally likely; "uneven": a few hold most of the deals; "movers": each
company is tied to two industries, the slow case of iterations. There ours runs alone: the other
had not ended after five minutes. pyfixest takes part where it is installed, held to one thread;
its first round, in which it compiles, does not count either.
"""

from __future__ import annotations

import json
import os
import time
from collections.abc import Callable
from importlib import metadata
from importlib.util import find_spec
from pathlib import Path

for _name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "NUMBA_NUM_THREADS", "RAYON_NUM_THREADS"):
    os.environ.setdefault(_name, "1")

import numpy as np  # noqa: E402
import pandas as pd  # noqa: E402
from linearmodels.iv.absorbing import AbsorbingLS  # noqa: E402

from pipeline.core.design import Design, FitOptions  # noqa: E402
from pipeline.estimators.least_squares import fixed_effects  # noqa: E402

FIGURES = Path(__file__).parent / "figures" / "absorb_speed.json"
N, COMPANIES, INDUSTRIES, YEARS = 100_000, 5_000, 300, 60
ROUNDS = 3


def deals(kind: str) -> Design:
    rng = np.random.default_rng(20260301)

    def drawn(levels: int) -> np.ndarray:
        share = rng.dirichlet(np.full(levels, 0.5)) if kind == "uneven" else None
        return np.concatenate([np.repeat(np.arange(levels), 2), rng.choice(levels, N, p=share)])[:N]

    company, year = drawn(COMPANIES), drawn(YEARS)
    industry = drawn(INDUSTRIES)
    if kind == "movers":
        home = company * INDUSTRIES // COMPANIES
        industry = (home + (rng.random(N) < 0.02)) % INDUSTRIES
    X = np.column_stack([np.ones(N), rng.normal(size=(N, 5))])
    X[:, 1:] += 0.3 * rng.normal(size=(COMPANIES, 5))[company]
    y = 0.1 * X.sum(axis=1) + rng.normal(size=COMPANIES)[company]
    y = y + rng.normal(size=INDUSTRIES)[industry] + rng.normal(size=N)
    return Design(
        y=y,
        X=X,
        names=("constant", "treatment", "a", "b", "c", "d"),
        treatment="treatment",
        rows=tuple(map(str, range(N))),
        outcome="CAR",
        effects={"company": company, "industry": industry, "year": year},
        clusters={"company": company, "year": year},
    )


def theirs(design: Design) -> float:
    absorb = pd.DataFrame({k: pd.Categorical(c) for k, c in design.effects.items()})
    table = pd.DataFrame(design.X[:, 1:], columns=list(design.names[1:]))
    fit = AbsorbingLS(pd.Series(design.y), table, absorb=absorb).fit(
        cov_type="clustered", clusters=pd.DataFrame(design.clusters)
    )
    return float(fit.params["treatment"])


def fast(design: Design) -> float:
    """pyfixest on the same rows."""
    import pyfixest

    table = pd.DataFrame(design.X[:, 1:], columns=list(design.names[1:]))
    table = table.assign(y=design.y, **design.effects)
    fit = pyfixest.feols(
        f"y ~ {' + '.join(design.names[1:])} | {' + '.join(design.effects)}",
        table,
        vcov={"CRV1": " + ".join(design.clusters)},
    )
    return float(fit.coef()["treatment"])


def with_fast(design: Design, mine: float) -> dict[str, object]:
    """What pyfixest takes, where it is installed."""
    if find_spec("pyfixest") is None:
        return {}
    try:
        times = [timed(fast, design) for _ in range(ROUNDS + 1)][1:]
    except ValueError as failure:  # its iterations reached their limit
        return {"pyfixest": metadata.version("pyfixest"), "pyfixest_failed": str(failure)}
    apart = abs(times[0][1] - ours(design))
    return {
        "pyfixest": metadata.version("pyfixest"),
        "pyfixest_seconds": round(min(seconds for seconds, _ in times), 3),
        "pyfixest_coefficient_differs_by": float(f"{apart:.1e}"),
        "of_pyfixest": round(mine / min(seconds for seconds, _ in times), 2),
    }


def ours(design: Design) -> float:
    return float(fixed_effects(design, FitOptions()).term("treatment")["coefficient"])


def timed(run: Callable[[Design], float], design: Design) -> tuple[float, float]:
    begin = time.process_time()
    value = run(design)
    return time.process_time() - begin, value


def alone(kind: str) -> dict[str, object]:
    """Ours without the other."""
    design = deals(kind)
    seconds = min(timed(ours, design)[0] for _ in range(ROUNDS))
    levels = [COMPANIES, INDUSTRIES, YEARS]
    made = {"effects": kind, "deals": N, "levels": levels, "seconds": round(seconds, 3)}
    return {**made, **with_fast(design, seconds)}


def measure(kind: str) -> dict[str, object]:
    """Both in turns: the fastest of each, and how far their coefficients are apart."""
    design = deals(kind)
    rounds = [(timed(ours, design), timed(theirs, design)) for _ in range(ROUNDS + 1)][1:]
    mine, other = (min(pair[at][0] for pair in rounds) for at in (0, 1))
    (_, one), (_, two) = rounds[0]
    return {
        "effects": kind,
        "deals": N,
        "levels": [COMPANIES, INDUSTRIES, YEARS],
        "seconds": round(mine, 3),
        "linearmodels_seconds": round(other, 3),
        "times_faster": round(other / mine, 2),
        "coefficients_differ_by": float(f"{abs(one - two):.1e}"),
        **with_fast(design, mine),
    }


def main() -> None:
    """Time every kind and write the figures."""
    rows = [measure("even"), measure("uneven"), alone("movers")]
    FIGURES.write_text(json.dumps(rows, indent=1) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
