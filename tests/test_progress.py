"""How long is left, told by a clock that the test turns; and the page that is opened at the end."""

from __future__ import annotations

import json
import webbrowser
from pathlib import Path

import pytest

from pipeline.progress import TYPICAL, Pace, earlier_seconds
from pipeline.screen import open_document, start_with


class Hands:
    """A clock that stands still until it is moved."""

    def __init__(self) -> None:
        self.at = 100.0

    def __call__(self) -> float:
        return self.at


def test_the_time_left_by_an_earlier_run() -> None:
    clock = Hands()
    pace = Pace(clock)
    pace.expect({"a": 10.0, "b": 20.0, "c": 30.0})
    pace.begin("a")
    assert pace.left() == pytest.approx(60.0)
    clock.at += 4
    assert pace.left() == pytest.approx(56.0)
    clock.at += 16
    assert pace.left() == pytest.approx(50.0), "a stage that takes longer is not less than over"
    pace.begin("b")
    assert pace.left() == pytest.approx(100.0), "twice as slow so far: twice as long for the rest"
    clock.at += 40
    pace.begin("c")
    clock.at += 60
    assert pace.left() == pytest.approx(0.0)
    assert pace.words() == "about 1 s left"


def test_without_an_earlier_run_nothing_is_said_before_a_stage_is_done() -> None:
    clock = Hands()
    pace = Pace(clock)
    pace.expect({})
    assert pace.words() == ""
    first, *rest = TYPICAL
    pace.begin(first)
    clock.at += 10 * TYPICAL[first]
    assert pace.left() is None
    pace.begin(rest[0])
    assert pace.left() == pytest.approx(10 * sum(TYPICAL[name] for name in rest))


def test_stages_nobody_expected_do_no_harm() -> None:
    clock = Hands()
    pace = Pace(clock)
    pace.expect({"a": 10.0})
    for stage in ("study file", "something new", "a"):
        pace.begin(stage)
        clock.at += 1
    assert pace.left() == pytest.approx(9.0)


@pytest.mark.parametrize(("seconds", "words"), [(0.2, "1 s"), (89.0, "89 s"), (600.0, "10 min")])
def test_the_time_left_in_words(seconds: float, words: str) -> None:
    pace = Pace(Hands())
    pace.expect({"a": seconds})
    assert pace.words() == f"about {words} left"


@pytest.mark.parametrize("text", ["", "[]", "{}", '{"seconds": 3}', '{"seconds": {"a": "x"}}'])
def test_a_folder_that_holds_no_run_tells_nothing(text: str, tmp_path: Path) -> None:
    assert earlier_seconds(tmp_path / "nowhere") == {}
    (tmp_path / "manifest.json").write_text(text)
    assert earlier_seconds(tmp_path) == {}


def test_an_earlier_run_tells_its_seconds(tmp_path: Path) -> None:
    (tmp_path / "manifest.json").write_text(json.dumps({"seconds": {"inputs": 2, "tests": 0.5}}))
    assert earlier_seconds(tmp_path) == {"inputs": 2.0, "tests": 0.5}


def test_the_document_to_start_with() -> None:
    assert start_with(["memo.docx", "report.html"]) == "report.html"
    assert start_with(["memo.docx", "memo.pdf"]) == "memo.pdf"
    assert start_with(["tables/a.tex"]) == "manifest.json"


def test_the_page_is_opened_where_there_is_a_browser(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    opened: list[str] = []
    monkeypatch.setenv("BROWSER", "mine")
    monkeypatch.setattr(webbrowser, "open", lambda address: opened.append(address) or True)
    assert open_document(tmp_path / "a b.html")
    assert opened == [(tmp_path / "a b.html").as_uri()]


def test_without_a_browser_nothing_is_opened(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def broken(address: str) -> bool:
        raise webbrowser.Error("none")

    monkeypatch.setattr("sys.platform", "linux")
    for name in ("BROWSER", "DISPLAY", "WAYLAND_DISPLAY"):
        monkeypatch.delenv(name, raising=False)
    monkeypatch.setattr(webbrowser, "open", lambda address: pytest.fail("must not be called"))
    assert not open_document(tmp_path)
    monkeypatch.setenv("DISPLAY", ":0")
    monkeypatch.setattr(webbrowser, "open", broken)
    assert not open_document(tmp_path)
