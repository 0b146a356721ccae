"""How long the demo takes, and how much memory, as a whole process.

Rerun from the project's root, on a quiet machine, with the project installed:

    .venv/bin/python -m tests.benchmarks.demo_speed

Writes ``tests/benchmarks/figures/demo_speed.json``: the best and the median of several runs of
``dealwake --help`` (limit 0.25 s) and of ``dealwake run configs/demo.toml`` (limits 15 s, 1 GiB).
"""

from __future__ import annotations

import json
import os
import platform
import resource
import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
FIGURES = Path(__file__).with_name("figures")
HELP_RUNS, DEMO_RUNS = 9, 3


def seconds(arguments: list[str]) -> float:
    """Wall-clock seconds of one run of the command."""
    begin = time.perf_counter()
    subprocess.run(
        [sys.executable, "-m", "pipeline", *arguments], cwd=ROOT, check=True, capture_output=True
    )
    return time.perf_counter() - begin


def summary(values: list[float], limit: float) -> dict[str, float]:
    """Best and median of several runs, with the limit."""
    return {
        "best_seconds": round(min(values), 3),
        "median_seconds": round(statistics.median(values), 3),
        "limit_seconds": limit,
        "runs": len(values),
    }


def main() -> None:
    """Measure and write the figures."""
    with tempfile.TemporaryDirectory() as folder:
        out = str(Path(folder) / "demo")
        helped = [seconds(["--help"]) for _ in range(HELP_RUNS)]
        demo = [seconds(["run", "configs/demo.toml", "--out", out]) for _ in range(DEMO_RUNS)]
        stages = json.loads((Path(out) / "manifest.json").read_text())["seconds"]
    peak = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss / 1024
    figures = {
        "rerun": "python -m tests.benchmarks.demo_speed",
        "python": platform.python_version(),
        "cores": os.cpu_count(),
        "help": summary(helped, 0.25),
        "demo": summary(demo, 15.0),
        "demo_peak_mebibytes": round(peak),
        "demo_limit_mebibytes": 1024,
        "last_run_stage_seconds": stages,
    }
    FIGURES.mkdir(exist_ok=True)
    (FIGURES / "demo_speed.json").write_text(json.dumps(figures, indent=2) + "\n")
    print(json.dumps(figures, indent=2))


if __name__ == "__main__":
    main()
