"""The keys of the papers: what they allow, and how they reach the documents and the manifest."""

from __future__ import annotations

from pathlib import Path

import pytest
from PIL import Image

from pipeline.core.house import PLAIN, Reviewer, money_heading, money_words
from pipeline.registry import FORMATS, TABLE
from pipeline.study.load import load_study
from pipeline.study.papers import house_of
from tests.study.studies import BASE, refused, write

STYLE = """
[papers]
stars = true
brackets = "t value"
decimals = 0
money = "US$ {} m"
dates = "german"
footer = "  Confidential "
page = "Letter"
reviewers = [{ name = "A. Reader", role = "Head of risk" }]
"""


def study(tmp_path: Path, text: str = "") -> Path:
    return write(tmp_path / "study.toml", f"{BASE}\n{text}")


def test_without_a_key_nothing_is_changed(tmp_path: Path) -> None:
    papers = load_study(study(tmp_path)).papers
    assert house_of(papers) == PLAIN
    assert not papers.stars


def test_every_key_reaches_the_documents(tmp_path: Path) -> None:
    house = house_of(load_study(study(tmp_path, STYLE)).papers)
    assert (house.stars, house.brackets, house.decimals) == (True, "t value", 0)
    assert (house.money, house.dates, house.page) == ("US$ {} m", "german", "Letter")
    assert house.footer == "Confidential"
    assert house.reviewers == (Reviewer("A. Reader", "Head of risk"),)


@pytest.mark.parametrize(
    ("line", "words"),
    [
        ('money = "US$"', "hold {} once"),
        ('money = "{} and {}"', "hold {} once"),
        ('money = "{}"', "hold {} once"),
        ("decimals = 7", "less than or equal to 6"),
        ('brackets = "p"', "'interval', 't value' or 'standard error'"),
        ('dates = "klingon"', "'french'"),
        ('page = "A5"', "'A4' or 'Letter'"),
        ('reviewers = [{ name = "", role = "x" }]', "at least 1 character"),
    ],
)
def test_what_a_key_does_not_allow(line: str, words: str, tmp_path: Path) -> None:
    (finding,) = refused(study(tmp_path, f"[papers]\n{line}\n"))
    assert words in finding.expected


def test_a_logo_is_looked_for_beside_the_study_that_names_it(tmp_path: Path) -> None:
    Image.new("RGB", (30, 10)).save(tmp_path / "sign.png")
    house = house_of(load_study(study(tmp_path, '[papers]\nlogo = "sign.png"\n')).papers)
    assert house.logo is not None
    assert house.logo.data == (tmp_path / "sign.png").read_bytes()


def test_a_logo_that_is_not_there_stops_the_study_before_it_runs(tmp_path: Path) -> None:
    (finding,) = refused(study(tmp_path, '[papers]\nlogo = "sign.png"\n'))
    assert (finding.rule, finding.column) == ("missing_file", "papers.logo")


def test_no_logo_may_be_said_as_an_empty_text(tmp_path: Path) -> None:
    assert load_study(study(tmp_path, '[papers]\nlogo = ""\n')).papers.logo is None


def test_the_pdf_waits_until_it_is_asked_for(tmp_path: Path) -> None:
    formats = load_study(study(tmp_path)).report.formats
    assert "pdf" not in formats
    assert {*formats, "pdf"} == {entry.key for entry in TABLE[FORMATS]}


@pytest.mark.parametrize(
    ("currency", "pattern", "words", "heading"),
    [
        ("USD million", "", ("USD ", " million"), "USD million"),
        ("USD", "", ("USD ", ""), "USD"),
        ("USD million", "US$ {} m", ("US$ ", " m"), "US$ m"),
        ("EUR million", "{} Mio. €", ("", " Mio. €"), "Mio. €"),
    ],
)
def test_money_as_the_house_shows_it(
    currency: str, pattern: str, words: tuple[str, str], heading: str
) -> None:
    assert money_words(currency, pattern) == words
    assert money_heading(currency, pattern) == heading
