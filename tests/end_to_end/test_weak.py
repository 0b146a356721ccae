"""The weak-instrument twin of the demo, through the command: the set tells how little is known."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pandas as pd
import pytest

from tests.end_to_end.conftest import ROOT, dealwake

TABLES = ("deals.xlsx", "prices.parquet", "benchmarks.parquet", "candidates.parquet")


@pytest.fixture(scope="module")
def weak(tmp_path_factory: pytest.TempPathFactory) -> Path:
    base = tmp_path_factory.mktemp("weak")
    script = ROOT / "data_demo" / "make_demo.py"
    command = [sys.executable, str(script), "--weak-instruments", "--out", str(base)]
    subprocess.run(command, check=True, capture_output=True)
    study = base / "weak.toml"
    demo = (ROOT / "configs" / "demo.toml").as_posix()
    names = "\n".join(f'{name.split(".")[0]} = "{name}"' for name in TABLES)
    study.write_text(f'base = "{demo}"\n[inputs]\n{names}\nfactors = "factors.parquet"\n')
    return study


@pytest.mark.parametrize("instruments", [["treasury_shares", "fast_placement"], ["fast_placement"]])
def test_weak_instruments_are_told_in_every_document(
    weak: Path, tmp_path: Path, instruments: list[str]
) -> None:
    study = weak.with_name("again.toml")
    listed = ", ".join(f'"{name}"' for name in instruments)
    light = "[placebo]\ndraws = 0\n[scrutiny]\nrun = false\n"
    study.write_text(f'base = "weak.toml"\n[instruments]\nuse = [{listed}]\n{light}')
    dealwake("run", study, "--out", tmp_path / "out", "--quiet")
    checks = pd.read_parquet(tmp_path / "out" / "data" / "diagnostics.parquet")
    strength = checks[checks["check"].str.contains("effective F")].iloc[0]
    assert strength["value"] < 10
    assert strength["verdict"] == "warn"
    headline = pd.read_parquet(tmp_path / "out" / "data" / "headline.parquet").set_index("name")
    assert headline.loc["feature_effect", "shape"] in ("two rays", "the whole line", "interval")
    for name in ("report.html", "memo.docx", "tables.xlsx"):
        assert (tmp_path / "out" / name).stat().st_size > 10_000
