"""Two runs side by side: what differs, what moved, and what the differences explain."""

from __future__ import annotations

import json
import shutil
from pathlib import Path

import pandas as pd
import pytest

from tests.end_to_end.conftest import dealwake
from tests.small import write_small_study


@pytest.fixture(scope="module")
def runs(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with the runs ``first`` and ``second`` of two studies over the same tables."""
    base = tmp_path_factory.mktemp("contrast")
    study = write_small_study(base / "study")
    second = base / "study" / "second.toml"
    second.write_text(
        'base = "study.toml"\ntitle = "Wider"\n[event_time]\nheadline = [-2, 2]\n'
        "minimum_observations = 110\n[inputs]\ndeals = 'fewer.csv'\n"
        '[papers]\nfooter = "Confidential & ours"\n'
    )
    deals = pd.read_csv(base / "study" / "deals.csv")
    deals.iloc[1:].to_csv(base / "study" / "fewer.csv", index=False)
    dealwake("run", study, "--out", base / "first")
    dealwake("run", second, "--out", base / "second")
    return base


@pytest.fixture(scope="module")
def told(runs: Path) -> dict[str, object]:
    done = dealwake("contrast", runs / "first", runs / "second", "--json")
    content: dict[str, object] = json.loads(done.stdout)
    return content


def frame(runs: Path, name: str) -> pd.DataFrame:
    return pd.read_parquet(runs / "first_and_second" / "data" / f"{name}.parquet")


def test_every_difference_is_named_and_no_other(told: dict[str, object]) -> None:
    found = {item["where"]: item for item in told["differences"]}  # type: ignore[attr-defined]
    assert set(found) == {
        "deals",
        "event_time.headline",
        "event_time.minimum_observations",
        "name",
        "papers.footer",
        "title",
    }
    assert found["event_time.headline"]["first"] == "[-1, 1]"
    assert not found["title"]["moves"]
    assert not found["papers.footer"]["moves"]


def test_the_page_wears_the_later_runs_style(runs: Path, told: dict[str, object]) -> None:
    page = (runs / "first_and_second" / "contrast.html").read_text(encoding="utf-8")
    assert "<footer><p>Confidential &amp; ours</p></footer>" in page


def test_the_moves_are_those_of_the_saved_numbers(runs: Path, told: dict[str, object]) -> None:
    numbers = frame(runs, "numbers").set_index("number")
    for name, row in (("mean_reaction", "mean_reaction"), ("ols", "effect_1_ols")):
        saved = [
            pd.read_parquet(runs / run / "data" / "headline.parquet").set_index("name")["value"]
            for run in ("first", "second")
        ]
        assert numbers.loc[name, "move"] == pytest.approx(saved[1][row] - saved[0][row], abs=1e-15)


def test_what_the_differences_explain_adds_up(runs: Path, told: dict[str, object]) -> None:
    explained = frame(runs, "explained")
    total = frame(runs, "numbers").set_index("number")["move"]
    summed = explained.groupby("number")["move"].sum()
    assert (summed - total).abs().max() < 1e-15
    alone = explained[explained["number"] == "mean_reaction"].set_index("difference")["move"]
    assert alone["event_time.minimum_observations"] == 0
    assert alone["event_time.headline"] != 0
    assert alone["deals"] != 0


def test_a_difference_alone_is_a_run_of_its_own(runs: Path, told: dict[str, object]) -> None:
    study = runs / "study" / "alone.toml"
    study.write_text('base = "study.toml"\n[event_time]\nheadline = [-2, 2]\n')
    dealwake("run", study, "--out", runs / "alone")
    means = {
        run: pd.read_parquet(runs / run / "data" / "headline.parquet").set_index("name")["value"]
        for run in ("first", "alone")
    }
    own = frame(runs, "explained").set_index(["difference", "number"])["move"]
    move = means["alone"]["mean_reaction"] - means["first"]["mean_reaction"]
    assert own["event_time.headline", "mean_reaction"] == pytest.approx(move, abs=1e-15)


def test_deals_of_one_run_only_say_why(runs: Path, told: dict[str, object]) -> None:
    deals = frame(runs, "deals")
    assert deals.values.tolist() == [["D00", "kept", "not in the list"]]


def test_documents_are_written(runs: Path, told: dict[str, object]) -> None:
    for name in ("contrast.html", "contrast.docx", "contrast.xlsx", "manifest.json"):
        assert (runs / "first_and_second" / name).stat().st_size > 0


def test_a_run_held_against_itself_has_no_difference(runs: Path) -> None:
    shutil.copytree(runs / "first", runs / "copy")
    done = dealwake("contrast", runs / "first", runs / "copy", "--json", "--out", runs / "same")
    content = json.loads(done.stdout)
    assert content["differences"] == []
    assert content["explained"] == []
    page = (runs / "same" / "contrast.html").read_text()
    assert "the same tables under the same settings" in page


def test_a_table_that_is_no_longer_the_one_read_stops_the_reruns(runs: Path) -> None:
    moved = runs / "moved"
    shutil.copytree(runs / "study", moved / "study")
    for run in ("first", "second"):
        shutil.copytree(runs / run, moved / run)
    deals = moved / "study" / "deals.csv"
    deals.write_text(deals.read_text().replace("D01", "E01"))
    done = dealwake("contrast", moved / "first", moved / "second", "--json")
    content = json.loads(done.stdout)
    assert content["explained"] == []
    assert any("deals.csv of first is no longer" in note for note in content["notes"])


def test_a_folder_without_a_run_is_refused(runs: Path) -> None:
    done = dealwake("contrast", runs / "first", runs / "study", "--json", expect=2)
    assert json.loads(done.stdout)["findings"][0]["rule"] == "no_run"
