"""The commands as functions: the blocks of README.md run as they stand, and frames come out."""

from __future__ import annotations

import re
from pathlib import Path

import openpyxl
import pandas as pd
import pytest

import pipeline
from pipeline import (
    InputProblem,
    check,
    contrast_runs,
    deal,
    draft,
    explain,
    load_study,
    power,
    run,
)
from pipeline.calls import Run
from tests.end_to_end.conftest import ROOT
from tests.small import write_small_study

README = (ROOT / "README.md").read_text(encoding="utf-8")
BLOCKS = re.findall(r"```python\n(.*?)```", README, re.S)


@pytest.fixture(scope="module")
def desk(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with a study file and, beside it, a folder of tables without one."""
    folder = tmp_path_factory.mktemp("desk")
    study = write_small_study(folder / "my_tables")
    text = study.read_text().replace('"deals.csv"', '"my_tables/deals.csv"')
    for name in ("prices", "benchmarks"):
        text = text.replace(f'"{name}.csv"', f'"my_tables/{name}.csv"')
    (folder / "my_study.toml").write_text(text + "\n[scrutiny]\nrun = false\n")
    study.unlink()
    return folder


@pytest.fixture(scope="module")
def made(desk: Path) -> Run:
    return run(desk / "my_study.toml")


@pytest.mark.parametrize("number", [0, 1])
def test_the_blocks_of_the_readme_run(
    number: int, desk: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    assert len(BLOCKS) == 2
    monkeypatch.chdir(desk)
    exec(compile(BLOCKS[number], f"README block {number}", "exec"), {})
    printed = capsys.readouterr().out
    if number == 0:
        assert "ols" in printed
        assert (desk / "reports" / "from_python" / "manifest.json").is_file()
    else:
        assert explain("unknown_variable").remedy in printed
        assert (desk / "my_tables" / "study.toml").is_file()


def test_the_face_holds_every_command() -> None:
    for name in pipeline.__all__:
        assert getattr(pipeline, name) is not None
    from pipeline.cli import app

    commands = {command.callback.__name__ for command in app.registered_commands}  # type: ignore[union-attr]
    # The room pipeline.contrast has that name already.
    assert (commands - {"contrast"}) | {"contrast_runs"} <= set(pipeline.__all__)


def test_frames_are_those_a_run_saves(made: Run, desk: Path) -> None:
    folder = desk / "saved"
    written = made.save(folder)
    assert "data/estimates.parquet" in written
    for name in ("estimates", "deals", "ledger"):
        saved = pd.read_parquet(folder / "data" / f"{name}.parquet")
        pd.testing.assert_frame_equal(saved, made.tables[name], check_dtype=False)
    with pytest.raises(InputProblem, match="holds"):
        made.save(desk)
    again = run(load_study(desk / "my_study.toml", {"event_time": {"headline": [0, 1]}}))
    again.save(desk / "other")
    frames = contrast_runs(folder, desk / "other")
    assert {"differences", "numbers"} <= set(frames)


def test_a_check_gives_its_findings_back(desk: Path, tmp_path: Path) -> None:
    good = check(desk / "my_study.toml")
    assert good.passes
    assert "stage" in good.ledger
    study = write_small_study(tmp_path / "bad")
    deals = pd.read_csv(study.parent / "deals.csv", dtype=str)
    deals.loc[2, "announced_at"] = "soon"
    deals.to_csv(study.parent / "deals.csv", index=False)
    bad = check(study, rows=tmp_path / "rows.xlsx")
    assert not bad.passes
    assert bad.findings["rule"].tolist() == ["unparseable_date"]
    assert bad.findings["row"].tolist() == ["4"]
    assert "deals.csv" in openpyxl.load_workbook(tmp_path / "rows.xlsx").sheetnames


def test_one_deal_and_the_power_of_all(made: Run, desk: Path) -> None:
    told = deal(desk / "my_study.toml", "D03")
    days = told.days.set_index("day")["abnormal"]
    own = made.tables["deals"].set_index("deal").loc["D03", "car_m1_1"]
    assert days.loc[-1:1].sum() == pytest.approx(own)
    found = power(desk / "my_study.toml")
    assert found.deals == 40
    assert found.frame["power"].is_monotonic_increasing


def test_a_draft_and_a_page(desk: Path, tmp_path: Path) -> None:
    zone = {"inputs.timestamp_zone": "Europe/London"}
    assert draft(desk / "my_tables", tmp_path / "drafted.toml", zone).checked
    assert explain("missing_zone").key == "missing_zone"
    with pytest.raises(InputProblem, match="no_such_rule"):
        explain("no_such_rule")
