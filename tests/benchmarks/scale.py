"""Seconds and memory of every stage as the deal list grows, from the tables to the documents.

Rerun from the project's root, on a quiet machine, with the project installed:

    python -m tests.benchmarks.scale --deals 1000 10000 100000 1000000

Writes ``tests/benchmarks/figures/scale.json``. The market is invented: 10,000 securities over
twenty years of one exchange's sessions in one parquet file of some fifty million rows, and the
deals fall on them at random. The study asks for the market model, three windows, the tests that
hold by rule, least squares, fixed effects and two stages with errors clustered by company; no
placebo dates and no scrutiny, whose work does not grow with the deals but by the draws asked for.
Each size runs in a process of its own. The peak is the stage's own high-water mark where the
kernel lets a process set its mark back, with what the stages before it left in memory included.
A second run with another window says what a rerun costs, which takes prices and abnormal returns
from what the first has kept.
"""

from __future__ import annotations

import argparse
import json
import os
import platform
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

FIGURES = Path(__file__).parent / "figures" / "scale.json"
SECURITIES, FIRST, LAST = 10_000, "2005-01-03", "2024-12-31"
AT_ONCE = 500
ROOM = (300, 30)
SIZES = (1_000, 10_000, 100_000)
STUDY = """
title = "Deals of a whole market"
question = "Does paying in shares cost the acquirer?"

[inputs]
deals = "deals.parquet"
prices = "prices.parquet"
benchmarks = "benchmarks.parquet"

[event_time]
estimation = [-250, -31]
minimum_observations = 120
headline = [-1, 1]
windows = {windows}
repeats = "keep_all"
mask_sessions = 1

[characteristics.relative_size]
label = "Deal value over market value, log"
ratio = ["deal_value", "market_value"]
log = true

[characteristics.size]
label = "Market value, log"
column = "market_value"
log = true

[regression]
treatment = "paid_in_shares"
controls = ["relative_size", "size"]
fixed_effects = ["industry", "year"]
clusters = ["security"]
columns = ["ols", "fixed_effects", "two_stage_least_squares"]

[instruments]
for = "paid_in_shares"
use = ["shares_left_over"]
rationale = "Left over from a buy-back and drawn at random, they move nothing but the payment."

[scrutiny]
run = false

[report]
formats = ["html", "docx", "xlsx"]
"""
WINDOWS = {"first": "[[0, 1], [-5, 5]]", "again": "[[0, 1], [-5, 5], [-3, 3]]"}


def market(folder: Path, securities: int = SECURITIES) -> np.ndarray:
    """Write prices and benchmark unless they are there; return the (T,) sessions."""
    from pipeline.returns.sessions import sessions_between

    days = sessions_between("XNYS", FIRST, LAST).days
    if (folder / "prices.parquet").exists() and (folder / "benchmarks.parquet").exists():
        return days
    stream = np.random.default_rng(20260301)
    moves = stream.normal(0.0003, 0.01, len(days))
    index = pa.array(days.astype("datetime64[ms]"))
    with pq.ParquetWriter(folder / "prices.parquet", _schema()) as out:
        for first in range(0, securities, AT_ONCE):
            codes = [f"S{at:05d}" for at in range(first, min(first + AT_ONCE, securities))]
            shares = stream.normal(0, 0.02, (len(codes), len(days))) + moves
            closes = (50 * np.exp(np.cumsum(shares, axis=1) - 0.0002)).round(4)
            columns = [
                pa.array(np.repeat(codes, len(days))),
                pa.concat_arrays([index] * len(codes)).cast(pa.date32()),
                pa.array(np.maximum(closes, 0.01).ravel()),
            ]
            out.write_table(pa.Table.from_arrays(columns, schema=_schema()))
    level = pd.Series(1000 * np.exp(np.cumsum(moves)))
    benchmark = pd.DataFrame({"exchange": "XNYS", "date": days.astype("datetime64[s]")})
    benchmark.assign(close=level).to_parquet(folder / "benchmarks.parquet")
    return days


def _schema() -> pa.Schema:
    fields = [("security", pa.string()), ("date", pa.date32()), ("close", pa.float64())]
    return pa.schema(fields)


def deal_list(folder: Path, days: np.ndarray, deals: int, securities: int = SECURITIES) -> None:
    """Write ``deals`` deals at random companies and sessions."""
    stream = np.random.default_rng(deals)
    position = stream.integers(ROOM[0], len(days) - ROOM[1], deals)
    left_over = stream.random(deals)
    frame = pd.DataFrame(
        {
            "deal_id": [f"D{at:07d}" for at in range(deals)],
            "security": [f"S{at:05d}" for at in stream.integers(0, securities, deals)],
            "exchange": "XNYS",
            "announced_at": pd.Series(days[position].astype(str)) + "T11:00:00-05:00",
            "market_value": np.exp(stream.normal(20, 1.5, deals)),
            "industry": stream.choice(["packaging", "flavours", "optics", "cables"], deals),
            "paid_in_shares": (stream.normal(0, 0.3, deals) + left_over > 0.5).astype(float),
            "shares_left_over": left_over,
        }
    )
    frame["deal_value"] = frame["market_value"] * np.exp(stream.normal(-2, 0.7, deals))
    frame.to_parquet(folder / "deals.parquet")


def _mark_back() -> None:
    """Set the process's high-water mark of memory back to what it holds."""
    Path("/proc/self/clear_refs").write_text("5", encoding="ascii")


def _mark() -> float:
    """MiB of the high-water mark."""
    lines = Path("/proc/self/status").read_text(encoding="ascii").splitlines()
    return next(int(line.split()[1]) / 1024 for line in lines if line.startswith("VmHWM"))


class Stages:
    """Hears when a stage begins; keeps the seconds and the peak of the one before."""

    def __init__(self) -> None:
        self.rows: dict[str, dict[str, float]] = {}
        self._name, self._begin = "", time.perf_counter()

    def __call__(self, name: str) -> None:
        self.close()
        self._name, self._begin = name, time.perf_counter()
        _mark_back()

    def close(self) -> None:
        """End the stage that is open."""
        if self._name:
            seconds = round(time.perf_counter() - self._begin, 2)
            self.rows[self._name] = {"seconds": seconds, "peak_mebibytes": round(_mark())}
        self._name = ""


def alone(study: str) -> None:
    """Run a study and print the stages' figures."""
    from pipeline.core.clock import Clock
    from pipeline.flow.commands import run
    from pipeline.saving import save
    from pipeline.study.load import load_study

    stages = Stages()
    loaded = load_study(Path(study))
    results, seconds = run(loaded, stages)
    save(loaded, results, seconds, Path(study).parent / "run", Clock(stages))
    stages.close()
    print(json.dumps(stages.rows))


def whole(folder: Path, name: str) -> dict[str, object]:
    """Figures of a run in a process of its own."""
    study = folder / f"{name}.toml"
    study.write_text(STUDY.format(windows=WINDOWS[name]), encoding="utf-8")
    code = f"from tests.benchmarks import scale; scale.alone({str(study)!r})"
    begin = time.perf_counter()
    environment = {**os.environ, "DEALWAKE_KEEP": str(folder / "kept")}
    done = subprocess.run(
        [sys.executable, "-c", code], env=environment, capture_output=True, text=True, check=False
    )
    if done.returncode:
        return {"failed": done.stderr.strip().splitlines()[-1]}
    stages = json.loads(done.stdout.splitlines()[-1])
    return {
        "seconds": round(time.perf_counter() - begin, 1),
        "peak_mebibytes": max(row["peak_mebibytes"] for row in stages.values()),
        "stages": stages,
    }


def main() -> None:
    """Measure and write the figures."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--deals", type=int, nargs="+", default=SIZES)
    parser.add_argument("--securities", type=int, default=SECURITIES)
    parser.add_argument(
        "--folder", default="", help="where the tables go; kept, and used again, if named"
    )
    parser.add_argument("--write", action="store_true", help="keep the figures")
    asked = parser.parse_args()
    with tempfile.TemporaryDirectory() as made:
        folder = Path(asked.folder or made)
        days = market(folder, asked.securities)
        rows: list[dict[str, object]] = []
        for deals in asked.deals:
            deal_list(folder, days, deals, asked.securities)
            load = round(os.getloadavg()[0], 1)
            runs = {name: whole(folder, name) for name in WINDOWS}
            rows.append({"deals": deals, "load_of_the_machine": load, **runs})
            print(json.dumps(rows[-1], indent=1), flush=True)
            if asked.write:
                write(rows, asked.securities, len(days))


def write(rows: list[dict[str, object]], securities: int, sessions: int) -> None:
    """Keep what has been measured so far, in place of the same sizes of an earlier run."""
    known = json.loads(FIGURES.read_text(encoding="utf-8"))["sizes"] if FIGURES.exists() else []
    new = {row["deals"] for row in rows}
    others = [row for row in known if row["deals"] not in new]
    figures = {
        "rerun": "python -m tests.benchmarks.scale --write --deals ...",
        "python": platform.python_version(),
        "cores": os.cpu_count(),
        "securities": securities,
        "price_rows": securities * sessions,
        "sizes": sorted([*others, *rows], key=lambda row: int(str(row["deals"]))),
    }
    FIGURES.write_text(json.dumps(figures, indent=2) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
