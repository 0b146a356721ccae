"""How many times faster than general libraries: one table, both sides measured in the same run.

Run from the project's root, on a quiet machine, with the project and pyfixest installed:

    python -m tests.benchmarks                    # everything, some twenty minutes
    python -m tests.benchmarks wild absorb        # some of it
    python -m tests.benchmarks --kept             # the table of the figures kept, nothing is run
    python -m tests.benchmarks wild --write       # keep the figures of what was run

Each measurement is a process of its own that runs ours and the other library side by side; its
docstring says how. Goals are those of the project. The load that other work put on the machine
when a measurement began stands beside it: above 1.5 on two cores the clock is no witness.
"""

from __future__ import annotations

import argparse
import json
import os
import platform
import subprocess
import sys
import tempfile
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

FIGURES = Path(__file__).parent / "figures"
MACHINE = FIGURES / "ratios_machine.json"
QUIET = 1.5


@dataclass(frozen=True, slots=True)
class Ratio:
    """How often ours goes into the other's seconds or memory, and how often it should."""

    what: str
    beside: str
    goal: float
    found: float

    @property
    def met(self) -> bool:
        """Whether the goal is met."""
        return self.found >= self.goal


def fits(figures: Any) -> Iterator[Ratio]:
    """Regressions of an event's returns, 100,000 of them."""
    words = {"market_model": "market-model fits", "factor_model": "four-factor fits"}
    for row in figures["models"]:
        goal, found = row["limit_times_faster_than_the_loop"], row["times_faster"]
        yield Ratio(words[row["model"]], "statsmodels, the loop", goal, found["the loop"]["100000"])
        joined = found["joined and predicted"]["100000"]
        yield Ratio(words[row["model"]], "statsmodels, joined by date", goal, joined)


def placebo(figures: Any) -> Iterator[Ratio]:
    """1,000 draws of 500 deals under five tests."""
    for name, goal in figures["limit_times_faster"].items():
        yield Ratio("placebo draws", f"{name} loop", goal, figures["times_faster"][name])


def wild(figures: Any) -> Iterator[Ratio]:
    """99,999 draws of the wild cluster bootstrap."""
    for row in figures:
        if row["what"].startswith("pyfixest"):
            yield Ratio("wild bootstrap", row["what"].split(",")[0], 20, row["times_ours"])


def probit(figures: Any) -> Iterator[Ratio]:
    """1,000 replications of a probit and of a two-step selection model."""
    for row in figures["rows"]:
        step, _, by = row["what"].partition(", ")
        if by == "two processes":
            yield Ratio(f"{step}, two processes", "statsmodels loop", 60, row["times faster"])
        elif by == "one process":
            less = row["times less processor"]
            yield Ratio(f"{step}, processor", "statsmodels loop", 60, less)


def absorb(figures: Any) -> Iterator[Ratio]:
    """Three absorbed effects and errors of two-way clusters, 100,000 rows."""
    for row in figures:
        what = f"absorbed effects, {row['effects']}"
        if "times_faster" in row:
            yield Ratio(what, "AbsorbingLS", 3, row["times_faster"])
        if "pyfixest_seconds" in row:
            yield Ratio(what, "pyfixest", 1 / 1.2, row["pyfixest_seconds"] / row["seconds"])


def reading(figures: Any) -> Iterator[Ratio]:
    """The windows of 500 events of 50 million rows of prices."""
    for kind in ("parquet", "csv"):
        row = figures[kind]
        ours = row["ours"]["500"]
        yield Ratio(f"reading {kind}, time", "pandas", row["limit_times_faster"],
                    ours["times_faster"])  # fmt: skip
        yield Ratio(f"reading {kind}, memory", "pandas", 1 / row["limit_share_of_memory"],
                    1 / ours["share_of_memory"])  # fmt: skip


TABLES: dict[str, Callable[[Any], Iterator[Ratio]]] = {
    "fit": fits, "placebo": placebo, "wild": wild, "probit": probit, "absorb": absorb,
    "reading": reading,
}  # fmt: skip


def measured(name: str, place: Path) -> Any:
    """The figures of a measurement made now, in a process of its own."""
    code = (
        f"from pathlib import Path; from tests.benchmarks import {name}_speed as it; "
        f"it.FIGURES = Path({str(place)!r}); it.main()"
    )
    subprocess.run([sys.executable, "-c", code], check=True, stdout=subprocess.DEVNULL)
    return json.loads(place.read_text(encoding="utf-8"))


def machine() -> dict[str, str | int]:
    """What it was measured on."""
    told = Path("/proc/cpuinfo")
    lines = told.read_text(encoding="utf-8").splitlines() if told.exists() else []
    name = next((line.split(":")[1].strip() for line in lines if "model name" in line), "")
    return {"processor": name, "cores": os.cpu_count() or 0, "python": platform.python_version()}


def times(value: float) -> str:
    """Three digits at most where there are decimals."""
    return f"{value:,.0f}" if value >= 100 else f"{value:.3g}"


def shown(ratios: list[Ratio], load: str) -> None:
    """Print rows of the table."""
    for row in ratios:
        print(
            f"| {row.what} | {row.beside} | {times(row.goal)} | {times(row.found)} | "
            f"{'yes' if row.met else 'no'} | {load} |",
            flush=True,
        )


def kept(name: str) -> Path:
    """Where the figures of a measurement are kept."""
    return FIGURES / f"{name}_speed.json"


def load_words(load: float) -> str:
    """The load of the machine, and whether the clock can be believed under it."""
    return f"{load:.1f}" if load <= QUIET else f"{load:.1f}, not quiet"


def main() -> None:
    """Measure what is asked for and print the table."""
    parser = argparse.ArgumentParser(description="Times faster than general libraries.")
    parser.add_argument("names", nargs="*", choices=[*TABLES, []], help="all unless named")
    parser.add_argument("--write", action="store_true", help="keep the figures")
    parser.add_argument("--kept", action="store_true", help="print the figures kept")
    asked = parser.parse_args()
    known = json.loads(MACHINE.read_text(encoding="utf-8")) if MACHINE.exists() else {}
    print(", ".join(f"{key} {value}" for key, value in machine().items()), "\n")
    print("| what | beside | goal, times | found | met | load |\n|---|---|---|---|---|---|")
    with tempfile.TemporaryDirectory() as folder:
        for name in asked.names or TABLES:
            if asked.kept:
                figures = json.loads(kept(name).read_text(encoding="utf-8"))
                load = known.get(name, {}).get("load", "not kept")
            else:
                load = load_words(os.getloadavg()[0])
                figures = measured(name, Path(folder) / kept(name).name)
                known[name] = {**machine(), "load": load}
            shown(list(TABLES[name](figures)), load)
            if asked.write and not asked.kept:
                made = (Path(folder) / kept(name).name).read_text(encoding="utf-8")
                kept(name).write_text(made, encoding="utf-8")
                MACHINE.write_text(json.dumps(known, indent=1) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
