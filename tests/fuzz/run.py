"""Search for files that break a reader, guided by the lines of code that each file reaches.

Rerun from the project's root, with the project installed and ``pip install '.[fuzz]'`` besides:

    .venv/bin/python -m tests.fuzz.run --seconds 400

``--seconds`` is for each kind; ``--folder`` keeps what was found, so that a later search
goes on from there. Writes ``tests/benchmarks/figures/fuzz.json``: executions, edges of the code
reached, inputs that reached something new, the faults found now and those mended before. An
execution of more than ``LIMIT`` seconds, or a process of more than ``MEMORY`` MB or 6 GiB of
addresses, is a fault.
"""

from __future__ import annotations

import argparse
import json
import re
import subprocess
import sys
import tempfile
import time
from pathlib import Path

from tests.fuzz.targets import FOUND

ROOT = Path(__file__).resolve().parents[2]
FIGURES = ROOT / "tests" / "benchmarks" / "figures" / "fuzz.json"
KINDS = ("csv", "xlsx", "parquet", "study", "moments")
LIMIT, MEMORY, LONGEST = 20, 2048, 20_000
LINE = re.compile(r"#(\d+)\s+\w+\s+cov: (\d+) ft: (\d+) corp: (\d+)")


def search(kind: str, seconds: float, folder: Path) -> dict[str, object]:
    """Search one kind for so long, in as many processes as crash; what was done and found."""
    end = time.monotonic() + seconds
    done = first = last = 0
    crashes: list[str] = []
    while (left := int(end - time.monotonic())) > 5:
        options = [f"-timeout={LIMIT}", f"-rss_limit_mb={MEMORY}", f"-max_len={LONGEST}"]
        options += ["-len_control=0", "-keep_seed=1"]
        options += [f"-max_total_time={left}", f"-artifact_prefix={folder}/native_"]
        made = subprocess.run(
            [sys.executable, "-m", "tests.fuzz.worker", kind, str(folder), *options],
            cwd=ROOT,
            capture_output=True,
            text=True,
            errors="replace",
            check=False,
        )
        lines = [tuple(map(int, found)) for found in LINE.findall(made.stderr)]
        if not lines:
            raise SystemExit(made.stderr[-3000:])
        done += lines[-1][0]
        first, last = first or lines[0][1], max(last, lines[-1][1])
        if made.returncode:
            crashes.append(made.stderr[-1500:])
            (folder / f"crash_{len(crashes)}.txt").write_text(made.stderr[-20_000:])
    found = [json.loads(path.read_text()) for path in sorted((folder / "faults").glob("*.json"))]
    return {
        "executions": done,
        "seconds": round(seconds),
        "edges_reached_by_sound_files": first,
        "edges_reached_at_the_end": last,
        "inputs_kept_for_reaching_something_new": len(list((folder / "corpus").iterdir())),
        "faults": [fault["place"] for fault in found],
        "processes_ended": [
            line for text in crashes for line in text.splitlines() if "ERROR" in line
        ],
    }


def main() -> None:
    """Search and write the figures."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--seconds", type=float, default=400.0)
    parser.add_argument("--folder", type=Path)
    parser.add_argument("--kinds", nargs="*", default=list(KINDS), choices=KINDS)
    chosen = parser.parse_args()
    folder = chosen.folder or Path(tempfile.mkdtemp(prefix="dealwake_fuzz_"))
    figures = json.loads(FIGURES.read_text()) if FIGURES.is_file() else {}
    figures["rerun"] = "python -m tests.fuzz.run --seconds 400"
    figures["mended"] = list(FOUND)
    for kind in chosen.kinds:
        figures.setdefault("kinds", {})[kind] = search(kind, chosen.seconds, folder / kind)
        FIGURES.write_text(json.dumps(figures, indent=2) + "\n")
        print(kind, json.dumps(figures["kinds"][kind], indent=2))


if __name__ == "__main__":
    main()
