"""The same tables, study and seed give the same bytes: from any process, however it is hurried."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from tests.end_to_end.conftest import ROOT
from tests.small import write_small_study

DRAWS = 1_000
STUDY = f"""
[selection]
explained_by = ["size"]
excluded = ["pull"]
draws = {DRAWS}
rationale = "Whom the lot fell on was asked first, and the lot says nothing about prices."

[placebo]
draws = 20
"""
# Runs of one process after one another: each with the number of processes of the replications,
# and what to make of kept results.
CHILD = """
import sys
from pathlib import Path
import joblib
from pipeline import keeping
from pipeline.cli import app
from pipeline.estimators import selection_bootstrap as boot

study, places = sys.argv[1], sys.argv[2:]
boot.WORTH_A_PROCESS = 0
keeping.LEAST_SECONDS = 0.0
parallel = joblib.Parallel
asked = []
joblib.Parallel = lambda n_jobs: asked.append(n_jobs) or parallel(n_jobs=n_jobs)
for place in places:
    out, jobs, *options = place.split()
    joblib.cpu_count = lambda: int(jobs)
    try:
        app(["run", study, "--out", out, "--quiet", *options])
    except SystemExit as end:
        assert not end.code, place
    assert asked.pop() == int(jobs), asked
"""


def write_study(folder: Path) -> Path:
    """The small study with candidates, of whom a lot decided who was asked first."""
    path = write_small_study(folder)
    text = path.read_text().replace(
        '["ols"]', '["ols", "heckman_two_step", "two_stage_least_squares"]'
    )
    text = text.replace("[inputs]\n", 'seed = 11\n[inputs]\ncandidates = "candidates.csv"\n')
    path.write_text(text.split("[report]")[0] + STUDY + '[report]\nformats = ["tex"]\n')
    deals = pd.read_csv(folder / "deals.csv")
    stream = np.random.default_rng(5)
    year = deals["announced_at"].str[:4].astype(int)
    announced = deals[["security", "exchange", "size", "deal_id"]].assign(year=year)
    others = pd.DataFrame(
        {
            "security": [f"C{at:03d}" for at in range(120)],
            "exchange": "XLON",
            "size": stream.normal(0, 1, 120).round(3),
            "year": 2018 + np.arange(120) % 2,
        }
    )
    table = pd.concat([announced, others], ignore_index=True)
    pull = table["deal_id"].notna() + stream.normal(0, 1, len(table))
    as_of = (table["year"] - 1).astype(str) + "-12-31"
    table.assign(pull=pull.round(3), as_of=as_of).to_csv(folder / "candidates.csv", index=False)
    return path


def in_a_process(study: Path, kept: Path, salt: str, *places: str) -> None:
    """Runs of one new process, whose hashes are salted so."""
    done = subprocess.run(
        [sys.executable, "-c", CHILD, str(study), *places],
        env={
            **os.environ,
            "PYTHONHASHSEED": salt,
            "PYTHONPATH": str(ROOT),
            "DEALWAKE_KEEP": str(kept),
        },
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stdout + done.stderr


def written(folder: Path) -> dict[str, bytes]:
    """Every file but the manifest, which says how many seconds each stage took."""
    return {
        path.relative_to(folder).as_posix(): path.read_bytes()
        for path in folder.rglob("*")
        if path.is_file() and path.name != "manifest.json"
    }


@pytest.fixture(scope="module")
def runs(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Four runs of one study, and one with another seed."""
    home = tmp_path_factory.mktemp("same")
    study = write_study(home / "study")
    kept = home / "kept"
    in_a_process(study, kept, "1", f"{home}/one 1", f"{home}/from_kept 1")
    in_a_process(study, kept, "4242", f"{home}/two 2 --fresh")
    study.write_text(study.read_text().replace("seed = 11", "seed = 12"))
    in_a_process(study, kept, "1", f"{home}/other_seed 1")
    return home


@pytest.mark.parametrize("other", ["from_kept", "two"])
def test_the_same_bytes(other: str, runs: Path) -> None:
    """From kept results; from two processes, afresh, in a process with other hashes."""
    first, second = written(runs / "one"), written(runs / other)
    assert first.keys() == second.keys()
    assert [name for name in first if first[name] != second[name]] == []
    assert sum(name.startswith("data/") for name in first) > 20


def test_the_seed_is_what_moves_them(runs: Path) -> None:
    """Draws are drawn: with another seed the tables that rest on them differ, and only those."""
    first, second = written(runs / "one"), written(runs / "other_seed")
    moved = {name for name in first if first[name] != second.get(name)}
    assert {"data/selection_versions.parquet", "data/placebo_draws.parquet"} <= moved
    assert not {"data/estimates.parquet", "data/abnormal_returns.parquet"} & moved


def test_results_were_kept_and_taken(runs: Path) -> None:
    assert len(list((runs / "kept").glob("*.kept"))) == 2
