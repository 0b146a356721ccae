"""Seconds and memory to read the prices that events touch, beside pandas reading the whole file.

Rerun from the project's root, on a quiet machine, with the project installed:

    python -m tests.benchmarks.reading_speed                  # 50 million rows, some ten minutes
    python -m tests.benchmarks.reading_speed --rows 5000000   # a quick look, nothing is written
    python -m tests.benchmarks.reading_speed --large          # 200 million rows besides, parquet

Writes ``tests/benchmarks/figures/reading_speed.json`` at 50 million rows or more. The tables are
invented in a temporary folder: 5,000 weekdays of one security after another, with date, close and
volume. Events fall on random securities and dates; each touches the sessions of an estimation
window of 250 sessions before it and 30 after it, with the margin that the study keeps.

Every reading is a process of its own, pandas and ours in turn; the shortest of the rounds counts,
by the clock and in processor seconds of all threads, imports left out. On a machine that does
something else at the time the clock makes ours, which uses every core, look slower. Peak memory is
that of the whole process, interpreter and libraries included.

Ours is :func:`pipeline.inputs.market.read_prices`, checks included; pandas is ``read_parquet`` and
``read_csv`` as they come, with dates parsed.
"""

from __future__ import annotations

import argparse
import json
import os
import platform
import resource
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import duckdb
import numpy as np
import pandas as pd

from pipeline.inputs.market import read_prices
from pipeline.inputs.reach import Reach, touched
from pipeline.inputs.source import Source

FIGURES = Path(__file__).parent / "figures" / "reading_speed.json"
DAYS = 5_000
FIRST = np.datetime64("2004-01-05")
EVENTS = (500, 5_000, 100_000)
REACH = Reach(before=260, after=40, whole="")
ROUNDS = 3
# Times faster than pandas, and its share of the memory; limits of the project.
LIMITS = {"parquet": (12, 1 / 10), "csv": (3, 1 / 5)}
LARGE, LARGE_LIMIT = 200_000_000, 512


def invent(rows: int, path: Path) -> None:
    """A price table of that many rows, one security after another."""
    kind = "FORMAT parquet" if path.suffix == ".parquet" else "FORMAT csv, HEADER"
    with duckdb.connect() as base:
        base.execute("SET preserve_insertion_order = true")
        base.execute(
            f"""COPY (
                SELECT printf('S%05d', r // {DAYS}) AS security,
                    DATE '{FIRST}' + CAST(r % {DAYS} + 2 * (r % {DAYS} // 5) AS INTEGER) AS date,
                    round(50 + 40 * sin(r * 0.011) + hash(r) % 997 / 1000, 2) AS close,
                    1000 + hash(r + 7) % 1000000 AS volume
                FROM range({rows}) AS made (r)
            ) TO '{path}' ({kind})"""
        )


def ours(path: Path, rows: int, events: int) -> int:
    """The rows that so many random events touch."""
    stream = np.random.default_rng(20260301)
    codes = [f"S{at:05d}" for at in stream.integers(0, rows // DAYS, events)]
    on = FIRST + stream.integers(400, 6_900, events)
    deals = pd.DataFrame({"security": codes, "announced_date": on.astype("datetime64[s]")})
    only = touched(REACH, deals, None, None, None)
    table, findings = read_prices(Source("prices", path), only, "")
    assert not findings, findings
    return len(table)


def theirs(path: Path) -> int:
    """All rows, by pandas."""
    if path.suffix == ".parquet":
        return len(pd.read_parquet(path))
    return len(pd.read_csv(path, parse_dates=["date"]))


def alone(path: Path, rows: int, events: int) -> None:
    """One reading; pandas' with no events. Prints its rows, seconds and peak mebibytes."""
    begin, worked = time.perf_counter(), time.process_time()
    read = ours(path, rows, events) if events else theirs(path)
    found = {
        "rows": read,
        "seconds": time.perf_counter() - begin,
        "processor_seconds": time.process_time() - worked,
    }
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(json.dumps({**found, "mebibytes": round(peak)}))


def measured(path: Path, rows: int, events: int) -> dict[str, float]:
    """The same in a process of its own."""
    words = ["-m", "tests.benchmarks.reading_speed", "--alone", str(path)]
    done = subprocess.run(
        [sys.executable, *words, "--rows", str(rows), "--events", str(events)],
        check=True, capture_output=True, text=True,
    )  # fmt: skip
    found: dict[str, float] = json.loads(done.stdout)
    return found


def best(
    path: Path, rows: int, events: tuple[int, ...], rounds: int
) -> dict[int, dict[str, float]]:
    """Of each number of events, the shortest time and the most memory of all rounds."""
    found: dict[int, list[dict[str, float]]] = {number: [] for number in events}
    for _ in range(rounds):
        for number in events:
            found[number].append(measured(path, rows, number))
    return {
        number: {
            "rows": each[0]["rows"],
            "seconds": round(min(one["seconds"] for one in each), 2),
            "processor_seconds": round(min(one["processor_seconds"] for one in each), 2),
            "peak_mebibytes": max(one["mebibytes"] for one in each),
        }
        for number, each in found.items()
    }


def compared(path: Path, rows: int) -> dict[str, object]:
    """Ours beside pandas, turn about."""
    rounds = ROUNDS if path.suffix == ".parquet" else 1
    found = best(path, rows, (0, *EVENTS), rounds)
    whole = found.pop(0)
    faster, share = LIMITS[path.suffix[1:]]
    return {
        "file_mebibytes": round(path.stat().st_size / 2**20),
        "pandas": whole,
        "limit_times_faster": faster,
        "limit_share_of_memory": round(share, 2),
        "ours": {
            number: {
                **one,
                "times_faster": round(whole["seconds"] / one["seconds"], 1),
                "times_less_processor": round(
                    whole["processor_seconds"] / one["processor_seconds"], 1
                ),
                "share_of_memory": round(one["peak_mebibytes"] / whole["peak_mebibytes"], 3),
            }
            for number, one in found.items()
        },
    }


def figures(rows: int, large: bool, folder: Path) -> dict[str, object]:
    """All that is measured, each file gone before the next is made."""
    found: dict[str, object] = {"rows": rows}
    for kind in LIMITS:
        path = folder / f"prices.{kind}"
        invent(rows, path)
        found[kind] = compared(path, rows)
        path.unlink()
    if large:
        path = folder / "large.parquet"
        invent(LARGE, path)
        found["large_rows"] = LARGE
        found["large_parquet"] = best(path, LARGE, EVENTS[:2], 1)
        found["large_limit_mebibytes"] = LARGE_LIMIT
    return found


def main() -> None:
    """Measure and write the figures."""
    asked = argparse.ArgumentParser(description=__doc__)
    asked.add_argument("--rows", type=int, default=50_000_000)
    asked.add_argument("--large", action="store_true")
    asked.add_argument("--alone", type=Path)
    asked.add_argument("--events", type=int, default=0)
    given = asked.parse_args()
    if given.alone:
        alone(given.alone, given.rows, given.events)
        return
    with tempfile.TemporaryDirectory(prefix="reading_") as folder:
        made = figures(given.rows, given.large, Path(folder))
    facts = {
        "rerun": "python -m tests.benchmarks.reading_speed --large",
        "python": platform.python_version(),
        "pandas": pd.__version__,
        "duckdb": duckdb.__version__,
        "cores": os.cpu_count(),
    }
    text = json.dumps({**facts, **made}, indent=2)
    print(text)
    if given.rows >= 50_000_000:
        FIGURES.write_text(text + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
