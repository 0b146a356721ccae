"""The doubts of a whole run: keys in the study file, numbers in data/, words on the page."""

from __future__ import annotations

import io
from pathlib import Path

import pandas as pd
import pytest
from rich.console import Console
from rich.progress import Progress
from typer.testing import CliRunner

from pipeline.cli import app
from pipeline.core.clock import Clock
from pipeline.progress import Bars, Pace
from tests.small import write_small_study

DOUBTS = """
[scrutiny]
resamples = 60
benchmarks = ["size"]
multiples = [2.0]
reliability = { size = 0.8 }
simulate_errors = true
known_before = [0.0, 0.3]
completion = [1.0, 0.5]

[scrutiny.grid]
run = true
estimators = ["two_stage_least_squares", "ols"]
winsorise = [0.0]
permutations = 19
adjusted_by = 99

[scrutiny.grid.samples]
"large" = { column = "size", above = 0.0 }
"""


def invoke(folder: Path, more: str, *pairs: tuple[str, str]) -> tuple[int, str, Path]:
    study = write_small_study(folder)
    text = study.read_text().replace('columns = ["ols"]', "") + more
    for old, new in pairs:
        assert old in text
        text = text.replace(old, new)
    study.write_text(text.replace('formats = ["tex"]', 'formats = ["html"]'))
    out = folder / "run"
    result = CliRunner().invoke(app, ["run", str(study), "--out", str(out)])
    return result.exit_code, result.output, out


@pytest.fixture(scope="module")
def run(tmp_path_factory: pytest.TempPathFactory) -> Path:
    code, told, out = invoke(tmp_path_factory.mktemp("doubts"), DOUBTS)
    assert code == 0, told
    return out


def table(run: Path, name: str) -> pd.DataFrame:
    return pd.read_parquet(run / "data" / f"{name}.parquet")


def test_every_doubt_leaves_its_numbers(run: Path) -> None:
    strengths = table(run, "hidden_strengths")
    assert strengths[["control", "multiple"]].to_numpy().tolist() == [["size", 2.0]]
    pairs = table(run, "expectations")[["known_before", "completion"]].drop_duplicates()
    assert sorted(map(tuple, pairs.to_numpy())) == [(0.0, 0.5), (0.0, 1.0), (0.3, 0.5), (0.3, 1.0)]
    assert set(table(run, "extrapolation")["curve"]) > {"simulated"}
    out = table(run, "left_out")
    assert {"deal", "company", "announcement day"} <= set(out["dimension"])
    keys = set(table(run, "breakdowns")["key"])
    assert {"confounder_zero", "exclusion_zero", "exclusion_least_squares"} <= keys


def test_the_curve_goes_through_estimators_and_named_samples(run: Path) -> None:
    cells = table(run, "specifications")
    assert set(cells["estimator"]) == {"two-stage least squares", "least squares"}
    assert {"all deals", "large"} <= set(cells["sample"])
    assert cells["estimator"].iloc[0] == "two-stage least squares"
    small = cells[cells["sample"] == "large"]
    assert (small["n"] < cells["n"].max()).all()
    assert cells["p_step_down"].notna().all()


def test_the_page_says_whether_the_finding_survives(run: Path) -> None:
    page = (run / "report.html").read_text()
    assert "What it would take to overturn the finding" in page
    assert "The assumption that carries the finding" in page
    assert "allowed for at once" in page


@pytest.mark.parametrize(
    ("old", "new", "told"),
    [
        ("adjusted_by = 99", "adjusted_by = 99\nmost_cells = 7", ("scrutiny.grid", "most_cells")),
        ("above = 0.0", "above = 90.0", ("scrutiny.grid.samples.large", "no deal")),
        ('column = "size"', 'column = "weight"', ("weight",)),
        ('["size"]\nmultiples', '["weight"]\nmultiples', ("scrutiny.benchmarks", "weight")),
        ("size = 0.8", "size = 1.8", ("scrutiny.reliability.size", "1.8")),
    ],
)
def test_what_has_no_answer_ends_the_run_and_names_the_key(
    old: str, new: str, told: tuple[str, ...], tmp_path: Path
) -> None:
    code, output, out = invoke(tmp_path, DOUBTS, (old, new))
    assert code == 2
    assert all(part in output for part in told), output
    assert not out.exists()


def test_who_wants_to_hear_of_portions_hears_them() -> None:
    class Listener:
        def __init__(self) -> None:
            self.heard: list[tuple[str, int, int]] = []

        def __call__(self, stage: str) -> None:
            self.heard.append((stage, 0, 0))

        def portion(self, name: str, done: int, total: int) -> None:
            self.heard.append((name, done, total))

    listener = Listener()
    Clock(listener).portion("cells", 3, 9)
    assert listener.heard == [("cells", 3, 9)]
    Clock(lambda _: None).portion("cells", 3, 9)


def test_the_terminal_shows_how_much_is_left_of_what_is_long() -> None:
    bar = Progress(console=Console(file=io.StringIO()))
    teller = Bars(bar, bar.add_task("study file", total=2, left=""), Pace())
    teller("scrutiny")
    teller.portion("cells", 300, 1200)
    teller.portion("cells", 900, 1200)
    stages, cells = bar.tasks
    assert (stages.completed, stages.description) == (1, "scrutiny")
    assert (cells.completed, cells.total) == (900, 1200)
    assert cells.fields["left"].startswith("900 of 1,200, about ")
    teller.portion("cells", 1200, 1200)
    assert not bar.tasks[1].visible
