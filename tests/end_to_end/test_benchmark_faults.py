"""A spoiled benchmark stops the run or travels to its report."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from pipeline.core.findings import InputProblem
from pipeline.flow import run
from pipeline.study.load import load_study
from tests.small import write_small_study


def test_dates_off_by_one_stop_the_run(tmp_path: Path) -> None:
    study = write_small_study(tmp_path)
    levels = pd.read_csv(tmp_path / "benchmarks.csv")
    levels["close"] = np.roll(levels["close"], 1)
    levels.iloc[1:].to_csv(tmp_path / "benchmarks.csv", index=False)
    with pytest.raises(InputProblem) as caught:
        run(load_study(study))
    (finding,) = caught.value.findings
    assert (finding.rule, finding.file) == ("benchmark_shifted", "benchmarks")


def test_a_heavy_company_is_marked_and_left_out_of_a_variant(tmp_path: Path) -> None:
    study = write_small_study(tmp_path)
    levels = pd.read_csv(tmp_path / "benchmarks.csv").assign(market_value=1000.0)
    levels.to_csv(tmp_path / "benchmarks.csv", index=False)
    deals = pd.read_csv(tmp_path / "deals.csv")
    deals["market_value"] = np.where(deals.index < 3, 150.0, 20.0)
    deals.to_csv(tmp_path / "deals.csv", index=False)
    results, _ = run(load_study(study))
    flagged = {entry.deal for _, entry in results.ledger if entry.rule == "benchmark_dominated"}
    assert flagged == {"D00", "D01", "D02"}
    assert "benchmark_dominated" in {finding.rule for finding in results.findings}
    variants = results.sensitivity.set_index("variant")["n"]
    assert variants["without companies that are much of their benchmark"] == 37
