"""A run in a house's style: its PDF read back against the data, and what the terminal says."""

from __future__ import annotations

import io
import json
import re
import webbrowser
from pathlib import Path

import pandas as pd
import pytest
from pypdf import PdfReader
from typer.testing import CliRunner

from pipeline.cli import app
from tests.small import write_small_study

STYLE = """
[papers]
stars = true
brackets = "standard error"
dates = "german"
footer = "Confidential"
page = "Letter"
logo = "sign.svg"
reviewers = [{ name = "Ada Example", role = "Head of risk" }]
"""
SIGN = '<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 3 1"><path d="M0 0h3v1z"/></svg>'


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = write_small_study(tmp_path_factory.mktemp("papers"))
    text = path.read_text().replace('formats = ["tex"]', 'formats = ["html", "docx", "pdf"]')
    path.write_text(text + STYLE)
    (path.parent / "sign.svg").write_text(SIGN)
    return path


def told(*arguments: str | Path) -> str:
    done = CliRunner().invoke(app, [*map(str, arguments)])
    assert done.exit_code == 0, done.output
    return done.stdout


@pytest.fixture(scope="module")
def out(study: Path) -> Path:
    folder = study.parent / "out"
    told("run", study, "--out", folder, "--quiet")
    return folder


def words(path: Path) -> str:
    reader = PdfReader(io.BytesIO(path.read_bytes()))
    return "".join(re.sub(r"\s+", "", page.extract_text()) for page in reader.pages)


def test_the_numbers_of_the_pdf_are_those_of_the_data(out: Path) -> None:
    shown = words(out / "memo.pdf")
    row = pd.read_parquet(out / "data" / "estimates.parquet").query("term == 'shares'").iloc[0]
    assert f"{row['coefficient'] * 1e4:,.0f}".replace("-", "−") in shown
    assert f"({row['std_error'] * 1e4:,.0f})" in shown
    mean = pd.read_parquet(out / "data" / "event_tests.parquet").iloc[0]["mean"]
    assert f"{mean * 1e4:,.0f}".replace("-", "−") in shown
    assert "AdaExample" in shown


def test_the_manifest_knows_the_logo_and_no_place_of_this_machine(out: Path) -> None:
    content = json.loads((out / "manifest.json").read_text())
    assert content["logo"]["file"] == "sign.svg"
    assert "logo" not in content["study"]["papers"]
    assert str(out.parent) not in (out / "manifest.json").read_text()


def test_two_runs_of_it_are_the_same_papers(study: Path, out: Path, tmp_path: Path) -> None:
    told("run", study, "--out", tmp_path / "again", "--quiet")
    for name in ("memo.pdf", "memo.docx", "report.html"):
        assert (tmp_path / "again" / name).read_bytes() == (out / name).read_bytes()


def test_the_page_is_opened_and_json_says_so(
    study: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    opened: list[str] = []
    monkeypatch.setenv("BROWSER", "mine")
    monkeypatch.setattr(webbrowser, "open", lambda address: opened.append(address) or True)
    text = told("run", study, "--out", tmp_path / "out", "--open", "--json")
    content = json.loads(text)
    assert content["opened"] is True
    assert opened == [(tmp_path / "out" / "report.html").resolve().as_uri()]
    assert set(content) == {"finding", "rows_read", "rows_kept", "folder", "files", "opened"}
    assert "memo.pdf" in content["files"]


def test_where_no_browser_is_the_path_is_said(
    study: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("BROWSER", "mine")
    monkeypatch.setattr(webbrowser, "open", lambda address: False)
    text = told("run", study, "--out", tmp_path / "out", "--open", "--quiet")
    page = (tmp_path / "out" / "report.html").resolve()
    assert f"No browser could be opened here; open {page} yourself." in text
    assert "Grade" in text or "grade" in text


def test_a_logo_that_went_away_stops_the_run_and_leaves_the_last_one(
    study: Path, out: Path
) -> None:
    sign = study.parent / "sign.svg"
    before = {path: path.read_bytes() for path in out.rglob("*") if path.is_file()}
    sign.rename(sign.with_suffix(".away"))
    try:
        done = CliRunner().invoke(app, ["run", str(study), "--out", str(out), "--quiet"])
    finally:
        sign.with_suffix(".away").rename(sign)
    assert done.exit_code == 2
    assert "[missing_file]" in done.output
    assert "papers.logo" in done.output
    assert {path: path.read_bytes() for path in out.rglob("*") if path.is_file()} == before
