"""Bad input: one screen that says what, where, expected and remedy; exit code 2; nothing lost."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable
from pathlib import Path

import pandas as pd
import pytest
from typer.testing import CliRunner

from pipeline.cli import app
from pipeline.core import store
from pipeline.core.findings import InputProblem
from tests.small import write_small_study

Spoil = Callable[[Path], None]


def edit(name: str, old: str, new: str) -> Spoil:
    def spoil(folder: Path) -> None:
        text = (folder / name).read_text()
        assert old in text
        (folder / name).write_text(text.replace(old, new, 1))

    return spoil


def cell(row: int, column: str, value: str) -> Spoil:
    def spoil(folder: Path) -> None:
        table = pd.read_csv(folder / "deals.csv", dtype=str)
        table.loc[row, column] = value
        table.to_csv(folder / "deals.csv", index=False)

    return spoil


def whole_column(column: str, value: str) -> Spoil:
    def spoil(folder: Path) -> None:
        pd.read_csv(folder / "deals.csv", dtype=str).assign(**{column: value}).to_csv(
            folder / "deals.csv", index=False
        )

    return spoil


def remove(name: str) -> Spoil:
    return lambda folder: (folder / name).unlink()


CASES: dict[str, tuple[Spoil, str, tuple[str, ...]]] = {
    "unknown key": (
        edit("study.toml", "minimum_observations", "minimum_observation"),
        "unknown_key",
        ("study.toml", "event_time.minimum_observation", "Did you mean 'minimum_observations'"),
    ),
    "missing file": (remove("prices.csv"), "missing_file", ("prices.csv", "inputs.prices")),
    "missing column": (
        edit("deals.csv", "security", "company"),
        "missing_column",
        ("deals.csv", "'security'", "[inputs.columns.deals]"),
    ),
    "unparseable date": (
        cell(3, "announced_at", "3rd of May"),
        "unparseable_date",
        ("deals.csv", "row 5", "announced_at", "3rd of May", "YYYY-MM-DD"),
    ),
    "unparseable number": (
        cell(6, "size", "1,2"),
        "unparseable_number",
        ("deals.csv", "row 8", "size", "1,2"),
    ),
    "overlapping windows": (
        edit("study.toml", "headline = [-1, 1]", "headline = [-25, 1]"),
        "overlapping_windows",
        ("study.toml", "[-25, +1]", "[-150, -21]"),
    ),
    "treatment without variation": (
        whole_column("shares", "1"),
        "no_variation",
        ("shares", "40 deals with 1"),
    ),
    "instrument as control": (
        edit("study.toml", 'controls = ["size"]', 'controls = ["size", "spare"]'),
        "instrument_is_control",
        ("study.toml", "'spare'"),
    ),
    "rationale missing": (
        edit("study.toml", "rationale =", "reason ="),
        "unknown_key",
        ("instruments.reason", "rationale"),
    ),
    "toml that does not parse": (
        edit("study.toml", "headline = [-1, 1]", "headline = [-1, 1"),
        "unreadable_file",
        ("study.toml", "line"),
    ),
    "time of day without a zone": (
        edit("study.toml", 'timestamp_zone = "Europe/London"', ""),
        "missing_zone",
        ("deals.csv", "timestamp_zone"),
    ),
    "two rows of one deal": (
        cell(1, "deal_id", "D00"),
        "conflicting_deal",
        ("deals.csv", "D00", "rows 2, 3"),
    ),
    "exchange nobody knows": (
        whole_column("exchange", "XQQQ"),
        "unknown_exchange",
        ("XQQQ", "ISO 10383"),
    ),
    "variable nobody defines": (
        edit("study.toml", 'controls = ["size"]', 'controls = ["weight"]'),
        "missing_column",
        ("'weight'", "deals.csv"),
    ),
    "a treatment of degrees": (
        lambda folder: whole_column("shares", "0.5")(folder) or cell(0, "shares", "0.7")(folder),
        "treatment_not_binary",
        ("shares", "regression.continuous"),
    ),
    "an announcement to come": (
        cell(2, "announced_at", "2097-05-05 10:00"),
        "date_out_of_range",
        ("row 4", "2097-05-05"),
    ),
    "one code on two exchanges": (
        lambda folder: cell(0, "security", "S01")(folder) or cell(0, "exchange", "XNYS")(folder),
        "two_exchanges",
        ("'S01'", "XLON and XNYS"),
    ),
    "a misspelt column of ours": (
        edit(
            "study.toml", "[event_time]", "[inputs.columns.deals]\nanounced_at = 'x'\n[event_time]"
        ),
        "unknown_key",
        ("inputs.columns.deals.anounced_at", "Did you mean 'announced_at'"),
    ),
    "a table nobody reads": (
        edit("study.toml", "[event_time]", "[inputs.columns.delas]\na = 'x'\n[event_time]"),
        "bad_value",
        ("inputs.columns.delas",),
    ),
    "a name that climbs": (
        edit("study.toml", 'title = "Small"', 'title = "Small"\nname = "../../away"'),
        "bad_value",
        ("name", "../../away"),
    ),
    "window in words": (
        edit("study.toml", "headline = [-1, 1]", 'headline = "three days"'),
        "bad_value",
        ("event_time.headline", "three days"),
    ),
}


def invoke(*arguments: str | Path) -> tuple[int, str]:
    done = CliRunner().invoke(app, [str(part) for part in arguments])
    if done.exception is not None and not isinstance(done.exception, SystemExit):
        raise AssertionError("a traceback reached the user") from done.exception
    return done.exit_code, done.output


@pytest.fixture
def study(tmp_path: Path) -> Path:
    return write_small_study(tmp_path / "mine")


def plain(text: str) -> str:
    return " ".join(text.split())


@pytest.fixture(scope="module")
def sound(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with the study in ``mine`` and a good run of it in ``out``."""
    base = tmp_path_factory.mktemp("sound")
    written = write_small_study(base / "mine")
    code, text = invoke("run", written, "--out", base / "out", "--quiet")
    assert code == 0, text
    return base


@pytest.mark.parametrize("name", CASES)
def test_one_screen_names_it_all_and_the_last_run_stands(
    name: str, sound: Path, tmp_path: Path
) -> None:
    spoil, rule, said = CASES[name]
    shutil.copytree(sound, tmp_path, dirs_exist_ok=True)
    study, out = tmp_path / "mine" / "study.toml", tmp_path / "out"
    before = {path: path.read_bytes() for path in out.rglob("*") if path.is_file()}
    spoil(study.parent)
    code, text = invoke("run", study, "--out", out, "--quiet")
    assert code == 2
    assert f"[{rule}]" in text
    for part in said:
        assert part in plain(text), plain(text)
    for word in ("where", "found", "expected", "do"):
        assert word in text
    assert "Traceback" not in text
    assert {path: path.read_bytes() for path in out.rglob("*") if path.is_file()} == before
    assert [path.name for path in tmp_path.iterdir()] in (["mine", "out"], ["out", "mine"])


def test_findings_of_several_files_come_together(study: Path) -> None:
    cell(2, "announced_at", "soon")(study.parent)
    edit("benchmarks.csv", "close", "level")(study.parent)
    code, text = invoke("run", study, "--quiet")
    assert code == 2
    assert "2 problems" in text
    assert "benchmarks.csv" in text
    assert "deals.csv" in text


def test_a_bad_window_on_the_command_line(study: Path) -> None:
    code, text = invoke("run", study, "--window", "three")
    assert code == 2
    assert "--window" in text


def test_a_study_file_that_is_not_there(tmp_path: Path) -> None:
    code, text = invoke("run", tmp_path / "none.toml")
    assert code == 2
    assert "none.toml" in text


def test_check_estimates_and_writes_nothing(study: Path) -> None:
    before = sorted(study.parent.rglob("*"))
    code, text = invoke("check", study)
    assert code == 0
    assert "deal list" in text
    assert sorted(study.parent.rglob("*")) == before


def test_a_run_that_dies_while_writing_leaves_the_last_one(
    study: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    out = tmp_path / "out"
    invoke("run", study, "--out", out, "--quiet")
    before = {path.name: path.read_bytes() for path in out.rglob("*") if path.is_file()}
    original = Path.write_bytes
    written: list[Path] = []

    def fail_late(path: Path, content: bytes) -> int:
        written.append(path)
        if len(written) > 3:
            raise KeyboardInterrupt
        return original(path, content)

    monkeypatch.setattr(Path, "write_bytes", fail_late)
    code, _ = invoke("run", study, "--out", out, "--quiet")
    monkeypatch.undo()
    assert code == 130
    assert {path.name: path.read_bytes() for path in out.rglob("*") if path.is_file()} == before
    assert sorted(path.name for path in tmp_path.iterdir()) == ["mine", "out"]


def test_a_failed_swap_puts_the_last_run_back(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    folder = tmp_path / "run"
    store.write_folder(folder, {"a.txt": b"old", store.MARK: b"{}"})
    original = Path.rename

    def refuse_new(path: Path, target: Path) -> Path:
        if path.name.endswith(".new"):
            raise OSError("full")
        return original(path, target)

    monkeypatch.setattr(store, "exchanged", lambda one, other: False)
    monkeypatch.setattr(Path, "rename", refuse_new)
    with pytest.raises(InputProblem, match="full"):
        store.write_folder(folder, {"a.txt": b"new"})
    assert (folder / "a.txt").read_bytes() == b"old"
    assert [path.name for path in tmp_path.iterdir()] == ["run"]


def test_a_folder_of_other_things_is_never_replaced(study: Path, tmp_path: Path) -> None:
    mine = tmp_path / "mydocs"
    mine.mkdir()
    (mine / "thesis.txt").write_text("years of work")
    code, text = invoke("run", study, "--out", mine, "--quiet")
    assert code == 2
    assert "[output_folder]" in text
    assert (mine / "thesis.txt").read_text() == "years of work"
    (tmp_path / "note").write_text("kept")
    code, text = invoke("run", study, "--out", tmp_path / "note")
    assert code == 2
    assert (tmp_path / "note").read_text() == "kept"


def test_what_a_killed_run_left_is_swept(study: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    invoke("run", study, "--out", out, "--quiet")
    dead = 2_000_000_000  # no process has this number
    (tmp_path / f".out.{dead}.new").mkdir()
    out.rename(tmp_path / f".out.{dead}.old")
    store.write_folder(tmp_path / "out", {"manifest.json": b"{}"})
    assert sorted(path.name for path in tmp_path.iterdir()) == ["mine", "out"]


def test_brackets_in_labels_are_words(study: Path, tmp_path: Path) -> None:
    study.write_text(study.read_text() + "\n[labels]\nshares = 'Paid [/b] in [red] shares'\n")
    code, text = invoke("run", study, "--out", tmp_path / "out")
    assert code == 0
    assert "Paid [/b] in [red] shares" in plain(text)


def test_check_finds_what_run_would(study: Path) -> None:
    whole_column("shares", "1")(study.parent)
    code, text = invoke("check", study)
    assert code == 2
    assert "[no_variation]" in text


def test_one_deals_story(study: Path) -> None:
    code, text = invoke("deal", study, "D03")
    assert code == 0
    assert "Day zero" in text
    assert "CAR[−1, +1]" in text
    code, text = invoke("deal", study, "D03", "--json")
    assert json.loads(text.splitlines()[-1])["story"]["deal"] == "D03"
    code, text = invoke("deal", study, "nobody")
    assert code == 2
    assert "'nobody'" in text


def test_power_of_the_deals_at_hand(study: Path) -> None:
    code, text = invoke("power", study)
    assert code == 0
    assert "40 deals" in text
    code, text = invoke("power", study, "--json")
    power = [row["power"] for row in json.loads(text.splitlines()[-1])["power"]]
    assert power == sorted(power)


def test_explain_says_what_a_rule_means() -> None:
    code, text = invoke("explain", "short_estimation")
    assert code == 0
    assert "What to do" in text
    code, text = invoke("explain", "no_such_rule")
    assert code == 2
