"""The frames of a run, their parquet bytes, and a folder written whole or not at all."""

from __future__ import annotations

import io
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import Diagnostic, Estimate, NotApplicable, Withheld, t_test
from pipeline.core.findings import InputProblem
from pipeline.core.parquet import parquet_bytes
from pipeline.core.results import StudyFacts, WindowTests
from pipeline.core.store import MARK, write_folder
from pipeline.core.tables import (
    DIAGNOSTIC_COLUMNS,
    ESTIMATE_COLUMNS,
    TEST_COLUMNS,
    abnormal_returns_frame,
    diagnostics_frame,
    estimates_frame,
    event_tests_frame,
    typed_frame,
)
from pipeline.core.window import Window
from tests.returns.panels import SPAN, fitted, invented_panel

WINDOW = Window(-1, 1)


@pytest.fixture(scope="module")
def abnormal() -> AbnormalReturns:
    return fitted("market_model", invented_panel(), [0, 1], [200, 315])


def window_tests(window: Window) -> WindowTests:
    tests = {
        "cross_sectional": t_test("Cross-sectional t", "zero", 2.0, 9),
        "single_event": NotApplicable("Single-deal t", "is for one deal"),
    }
    return WindowTests(
        window, "market_model", 10, 0.01, 0.009, 0.02, 0.7, (0.0, 0.02), tests,
        {"cross_sectional": 0.08},
    )  # fmt: skip


def estimate(title: str = "OLS", stages: tuple[Estimate, ...] = ()) -> Estimate:
    return Estimate(
        "ols", title, "a slope", ("constant", "shares"), np.array([0.1, 0.2]), np.eye(2), 5.0,
        "n - k", "robust", 7, "shares", "CAR", clusters={"security": 6, "year": 3}, stages=stages,
    )  # fmt: skip


def test_one_row_a_test_a_window() -> None:
    frame = event_tests_frame([window_tests(WINDOW), window_tests(Window(0, 1))])
    assert frame.dtypes.astype(str).to_dict() == TEST_COLUMNS
    assert frame["headline"].tolist() == [True, True, False, False]
    assert frame["window_start"].tolist() == [-1, -1, 0, 0]
    ok, none = frame.iloc[0], frame.iloc[1]
    assert (ok["status"], ok["statistic"], ok["df"], ok["p_holm"]) == ("ok", 2.0, 9.0, 0.08)
    assert (none["status"], none["reason"]) == ("not applicable", "is for one deal")
    assert np.isnan([none["statistic"], none["p_value"], none["p_holm"]]).all()


def test_one_row_a_term_and_stage() -> None:
    lead = estimate(stages=(estimate("First stage"),))
    columns = [lead, Withheld("heckman_two_step", "Heckman", "no number")]
    frame = estimates_frame(columns, {"window_start": -1, "expected_return": "market_model"})
    kinds = {"window_start": "int64", "expected_return": "str", **ESTIMATE_COLUMNS}
    assert frame.dtypes.astype(str).to_dict() == kinds
    assert set(frame["window_start"]) == {-1}
    assert frame["term"].tolist() == ["constant", "shares"] * 2
    assert frame["stage"].tolist() == ["", "", "First stage", "First stage"]
    assert set(frame["clusters"]) == {"security 6, year 3"}
    assert set(frame["title"]) == {"OLS"}
    np.testing.assert_allclose(frame["p_value"][:2], lead.p_values)


def test_empty_frames_keep_their_columns_and_types() -> None:
    for frame, columns in (
        (event_tests_frame([]), TEST_COLUMNS),
        (estimates_frame([], {"outcome": "premium"}), {"outcome": "str", **ESTIMATE_COLUMNS}),
        (diagnostics_frame([]), DIAGNOSTIC_COLUMNS),
    ):
        assert frame.empty
        assert frame.dtypes.astype(str).to_dict() == columns
    row = Diagnostic("Sample", "skewness", 0.4, "below 1", "pass", "fine", "some paper")
    assert diagnostics_frame([row])["value"].tolist() == [0.4]


def test_typed_frame_orders_its_columns() -> None:
    frame = typed_frame([{"b": 1, "a": 2}], {"a": "float64", "b": "str"})
    assert frame.to_dict("list") == {"a": [2.0], "b": ["1"]}


def test_one_row_a_deal_a_day_a_model(abnormal: AbnormalReturns) -> None:
    other = replace(abnormal, model="other")
    frame = abnormal_returns_frame({"market_model": abnormal, "other": other})
    assert len(frame) == 2 * 2 * len(SPAN)
    first = frame[(frame["expected_return"] == "other") & (frame["deal"] == "D001")]
    assert first["day"].tolist() == list(range(-10, 11))
    np.testing.assert_array_equal(first["abnormal_return"], abnormal.returns[1])
    np.testing.assert_array_equal(first["expected"], abnormal.expected[1])
    known = ~np.isnat(abnormal.days[1])
    assert first["date"].notna().tolist() == known.tolist()
    assert not known.all()


def test_parquet_bytes_depend_on_the_numbers_alone(abnormal: AbnormalReturns) -> None:
    frame = abnormal_returns_frame({"market_model": abnormal})
    shifted = frame.set_axis(range(100, 100 + len(frame)))
    assert parquet_bytes(frame) == parquet_bytes(shifted)
    back = pd.read_parquet(io.BytesIO(parquet_bytes(frame)))
    np.testing.assert_array_equal(back["abnormal_return"], frame["abnormal_return"])
    assert back["day"].tolist() == frame["day"].tolist()
    assert parquet_bytes(frame) != parquet_bytes(frame.assign(day=0))


def test_a_folder_is_replaced_whole(tmp_path: Path) -> None:
    folder = tmp_path / "runs" / "one"
    write_folder(folder, {"a.txt": b"1", "data/b.txt": b"2", MARK: b""})
    write_folder(folder, {"c/d/e.txt": b"3"})
    files = [path.relative_to(folder).as_posix() for path in folder.rglob("*") if path.is_file()]
    assert files == ["c/d/e.txt"]
    assert [path.name for path in folder.parent.iterdir()] == ["one"]


def test_a_failure_leaves_the_folder_as_it_was(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    folder = tmp_path / "one"
    write_folder(folder, {"a.txt": b"old", MARK: b""})

    def full(path: Path, content: bytes) -> int:
        raise OSError(f"no space for {len(content)} bytes")

    monkeypatch.setattr(Path, "write_bytes", full)
    with pytest.raises(InputProblem, match="no space"):
        write_folder(folder, {"a.txt": b"new"})
    assert (folder / "a.txt").read_bytes() == b"old"
    assert [path.name for path in tmp_path.iterdir()] == ["one"]


def design(**changes: object) -> Design:
    parts: dict[str, object] = {
        "y": np.zeros(3),
        "X": np.ones((3, 2)),
        "names": ("constant", "shares"),
        "treatment": "shares",
        "rows": ("A", "B", "C"),
        "outcome": "CAR",
    }
    return Design(**{**parts, **changes})  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"X": np.ones((2, 2))}, "X has shape"),
        ({"rows": ("A",)}, "X has shape"),
        ({"instruments": ("z",), "Z": np.ones((2, 1))}, "Z has shape"),
        ({"effects": {"year": np.zeros(2, dtype=int)}}, "one code a row"),
        ({"clusters": {"firm": np.zeros(4, dtype=int)}}, "one code a row"),
        ({"treatment": "cash"}, "not a regressor"),
        ({"y": np.array([0.0, np.nan, 0.0])}, "finite"),
    ],
)
def test_a_design_refuses_arrays_that_disagree(changes: dict[str, object], words: str) -> None:
    assert design().n == 3
    with pytest.raises(ValueError, match=words):
        design(**changes)


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"level": 1.0}, "level"),
        ({"level": 0.2}, "level"),
        ({"covariance": "hc9"}, "covariance"),
        ({"covariance": "hc1", "cluster": True}, "exclude"),
    ],
)
def test_fit_options_out_of_range(options: dict[str, object], words: str) -> None:
    with pytest.raises(ValueError, match=words):
        FitOptions(**options)  # type: ignore[arg-type]


def test_a_variable_is_called_by_its_label() -> None:
    facts = StudyFacts(
        "s", "t", "q", WINDOW, (WINDOW,), Window(-100, -20), 60, ("m",), "patell", "w",
        labels={"size": "Market value"},
    )  # fmt: skip
    assert facts.words("size") == "Market value"
    assert facts.words("run_up") == "run up"
