"""Rerunning with new windows, from a three-line study and from the command line."""

from __future__ import annotations

import json
from pathlib import Path

import pandas as pd
import pytest

from tests.end_to_end.conftest import ROOT, dealwake

DEMO = ROOT / "configs" / "demo.toml"


LIGHT = """
[placebo]
draws = 0
[scrutiny]
run = false
[report]
formats = ["html"]
"""


@pytest.fixture(scope="module")
def light(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The demo's study without its slower proofs."""
    study = tmp_path_factory.mktemp("light") / "light.toml"
    study.write_text(f'base = "{DEMO.as_posix()}"\n{LIGHT}')
    return study


def headline_windows(folder: Path) -> set[tuple[int, int]]:
    tests = pd.read_parquet(folder / "data" / "event_tests.parquet")
    own = tests[tests["headline"]]
    return set(zip(own["window_start"], own["window_end"], strict=True))


def test_three_lines_change_the_headline_window(light: Path, tmp_path: Path) -> None:
    study = tmp_path / "wider.toml"
    study.write_text(f'base = "{light.as_posix()}"\n[event_time]\nheadline = [-2, 2]\n')
    dealwake("run", study, "--out", tmp_path / "out")
    assert headline_windows(tmp_path / "out") == {(-2, 2)}
    estimates = pd.read_parquet(tmp_path / "out" / "data" / "estimates.parquet")
    assert set(estimates["window_start"]) == {-2}
    manifest = json.loads((tmp_path / "out" / "manifest.json").read_text())
    assert manifest["study"]["name"] == "wider"


@pytest.fixture(scope="module")
def wider(light: Path) -> Path:
    """A run with a window from the command line."""
    dealwake("run", light, "--window", "-3:3", cwd=light.parent)
    return light.parent / "reports" / "light_m3_3"


def test_a_window_on_the_command_line_gets_a_folder_of_its_own(wider: Path) -> None:
    assert headline_windows(wider) == {(-3, 3)}
    assert "[−3, +3]" in (wider / "report.html").read_text()
    assert [path.name for path in wider.parent.iterdir()] == ["light_m3_3"]


def test_the_car_of_a_new_window_is_the_sum_of_its_days(wider: Path, demo: Path) -> None:
    returns = pd.read_parquet(demo / "data" / "abnormal_returns.parquet")
    inside = returns[(returns["expected_return"] == "market_model") & returns["day"].between(-3, 3)]
    total = inside.groupby("deal")["abnormal_return"].sum()
    deals = pd.read_parquet(wider / "data" / "deals.parquet").set_index("deal")
    shared = deals.index.intersection(total.index)
    assert len(shared) > 400
    pd.testing.assert_series_equal(
        deals.loc[shared, "car_m3_3"], total[shared], check_names=False, rtol=1e-9, atol=1e-12
    )
