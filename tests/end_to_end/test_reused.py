"""A rerun takes from an earlier one what nothing has changed, and nothing else."""

from __future__ import annotations

import os
import pickle
import threading
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from pipeline import keeping
from pipeline.core.clock import Clock
from pipeline.flow.measured import Measured, measure_deals
from pipeline.keeping import ENDING, Shelf
from pipeline.study.load import load_study
from tests.returns.markets import EVENT, Market, market

READ, MEASURED = "inputs", "abnormal returns"


@pytest.fixture(autouse=True)
def _shelf(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv(keeping.FOLDER, str(tmp_path / "kept"))
    monkeypatch.setattr(keeping, "LEAST_SECONDS", 0.0)


def measured(path: Path, fresh: bool = False) -> tuple[Measured, set[str]]:
    """The deals of a study, and the stages that were gone through."""
    stages: set[str] = set()
    found = measure_deals(load_study(path), Clock(stages.add), fresh)
    return found, stages


def same(one: Measured, other: Measured) -> bool:
    """Whether two measurements agree to the bit in all that a later stage sees."""
    pd.testing.assert_frame_equal(one.deals, other.deals)
    pd.testing.assert_frame_equal(one.located, other.located)
    pd.testing.assert_frame_equal(one.ledger.frame(), other.ledger.frame())
    assert one.findings == other.findings
    assert one.windows == other.windows
    assert list(one.abnormal) == list(other.abnormal)
    for key, item in one.abnormal.items():
        for name in ("returns", "expected", "residual_variance", "estimation_returns", "bread"):
            np.testing.assert_array_equal(getattr(item, name), getattr(other.abnormal[key], name))
    for name, panel in one.panels.items():
        np.testing.assert_array_equal(panel.close, other.panels[name].close)
        on = other.measured_on[name]
        np.testing.assert_array_equal(one.measured_on[name].returns, on.returns)
    return True


@pytest.fixture
def made(tmp_path: Path) -> tuple[Market, Path]:
    found = market()
    return found, found.write(tmp_path)


def test_the_same_study_is_measured_once(made: tuple[Market, Path]) -> None:
    first, stages = measured(made[1])
    assert MEASURED in stages
    again, fewer = measured(made[1])
    assert fewer == {READ}
    assert same(first, again)


def test_new_windows_need_no_new_returns(made: tuple[Market, Path]) -> None:
    measured(made[1])
    study = made[1].read_text()
    made[1].write_text(study.replace("windows = [[0, 5]]", "windows = [[0, 1], [-3, 3]]"))
    again, stages = measured(made[1])
    assert stages == {READ}
    assert [window.label for window in again.windows] == ["[-1, +1]", "[0, +1]", "[-3, +3]"]


CHANGES = {
    "another headline window": ("headline = [-1, 1]", "headline = [0, 1]"),
    "a window beyond the days held": ("windows = [[0, 5]]", "windows = [[0, 15]]"),
    "another estimation window": ("estimation = [-120, -21]", "estimation = [-110, -21]"),
    "more observations needed": ("minimum_observations = 80", "minimum_observations = 100"),
    "logarithms": ("[event_time]", '[event_time]\nreturns = "log"'),
    "gaps lumped": ("[event_time]", '[event_time]\nmissing = "lumped"'),
    "gaps spanned": ("[event_time]", '[event_time]\nmissing = "trade_to_trade"'),
    "halts left alone": ("[event_time]", "[screens]\nlongest_halt = 0\n\n[event_time]"),
    "another screen": ("[event_time]", "[screens]\nzero_returns_drop = 0.01\n\n[event_time]"),
    "another model": ("[event_time]", '[expected_returns]\nalso = ["constant_mean"]\n[event_time]'),
    "another leading model": (
        "[event_time]", '[expected_returns]\nheadline = "market_adjusted"\n[event_time]'
    ),
    "a day closed": ("[event_time]", "[calendars.XLON]\nclosed = [2018-12-31]\n[event_time]"),
    "a cut-off": ("[event_time]", "[event_time]\ncutoff_minutes = 60"),
}  # fmt: skip


@pytest.mark.parametrize("case", CHANGES)
def test_what_a_change_touches_is_made_again(case: str, made: tuple[Market, Path]) -> None:
    """Beside a measurement kept before the change: as if nothing had been kept."""
    closes = made[0].closes
    closes.iloc[EVENT : EVENT + 2, 1] = np.nan
    closes.iloc[90:93, 2] = np.nan
    made[0].write(made[1].parent)
    before, _ = measured(made[1])
    study = made[1].read_text()
    assert CHANGES[case][0] in study
    made[1].write_text(study.replace(*CHANGES[case], 1))
    after, stages = measured(made[1])
    assert MEASURED in stages
    fresh, _ = measured(made[1], fresh=True)
    assert same(after, fresh)
    assert before is not after


def test_a_changed_cell_is_read(made: tuple[Market, Path]) -> None:
    before, _ = measured(made[1])
    made[0].closes.iloc[EVENT + 1, 0] *= 1.05
    made[0].write(made[1].parent)
    after, stages = measured(made[1])
    assert MEASURED in stages
    lead = "market_model"
    assert not np.array_equal(before.abnormal[lead].returns, after.abnormal[lead].returns)


def test_fresh_looks_at_nothing_kept(made: tuple[Market, Path]) -> None:
    measured(made[1])
    _, stages = measured(made[1], fresh=True)
    assert {READ, MEASURED} <= stages


def test_a_study_may_keep_nothing(made: tuple[Market, Path], tmp_path: Path) -> None:
    made[1].write_text(made[1].read_text() + "\n[compute]\nkeep = 0\n")
    measured(made[1])
    assert not (tmp_path / "kept").exists()


def test_what_is_quick_is_not_kept(
    made: tuple[Market, Path], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(keeping, "LEAST_SECONDS", 5.0)
    measured(made[1])
    assert not (tmp_path / "kept").exists()


def test_a_damaged_file_is_made_again(made: tuple[Market, Path], tmp_path: Path) -> None:
    first, _ = measured(made[1])
    for path in (tmp_path / "kept").iterdir():
        path.write_bytes(path.read_bytes()[:100])
    again, stages = measured(made[1])
    assert MEASURED in stages
    assert same(first, again)
    _, stages = measured(made[1])
    assert stages == {READ}


def test_the_folder_is_its_owners_alone(made: tuple[Market, Path], tmp_path: Path) -> None:
    measured(made[1])
    if os.name == "posix":
        assert (tmp_path / "kept").stat().st_mode & 0o077 == 0


def test_the_longest_unused_goes_first(tmp_path: Path) -> None:
    shelf = Shelf(tmp_path / "few", most=2_500)
    for at, name in enumerate("abc"):
        assert shelf.kept(name, lambda: b"x" * 1_000) == b"x" * 1_000
        for path in (tmp_path / "few").iterdir():
            if path.stat().st_mtime > 1_000_000:
                os.utime(path, (at, at))
    left = {pickle.loads(path.read_bytes()) for path in (tmp_path / "few").iterdir()}
    assert len(list((tmp_path / "few").iterdir())) == 2
    assert left == {(b"x" * 1_000,)}
    calls = []
    for name in "abc":
        shelf.kept(name, lambda name=name: calls.append(name) or b"x" * 1_000)  # type: ignore[misc]
    assert calls[0] == "a"
    assert shelf.kept("large", lambda: b"y" * 5_000) == b"y" * 5_000
    assert sum(path.stat().st_size for path in (tmp_path / "few").iterdir()) <= 2_500


def test_runs_at_the_same_time_see_whole_files(tmp_path: Path) -> None:
    shelf = Shelf(tmp_path / "shared", most=10_000_000)
    wrong: list[object] = []

    def work() -> None:
        for at in range(30):
            value = shelf.kept(f"key {at % 3}", lambda at=at: [at % 3] * 20_000)  # type: ignore[misc]
            if value != [at % 3] * 20_000:
                wrong.append(at)

    threads = [threading.Thread(target=work) for _ in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert wrong == []
    assert {path.suffix for path in (tmp_path / "shared").iterdir()} == {ENDING}


def test_a_folder_that_cannot_be_written_costs_nothing_but_time(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("in the way")
    shelf = Shelf(tmp_path / "file" / "kept", most=1_000)
    assert shelf.kept("key", lambda: 7) == 7
