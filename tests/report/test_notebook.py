"""A run shows itself in a notebook: the finding and the table, read by an HTML parser."""

from __future__ import annotations

from dataclasses import replace
from html.parser import HTMLParser

import pytest

from pipeline.core.results import Results
from pipeline.report.comparison import comparison_table
from pipeline.report.finding import finding_text
from pipeline.report.html import fragment
from pipeline.report.material import Material
from pipeline.report.numerals import lines
from tests.report.runs import with_frames

VOID = {"br"}


class Seen(HTMLParser):
    """Tags, attributes, rows of cells and words; fails where tags do not close as they opened."""

    def __init__(self, text: str):
        super().__init__(convert_charrefs=True)
        self.open: list[str] = []
        self.tags: list[str] = []
        self.attributes: list[tuple[str, str | None]] = []
        self.rows: list[list[str]] = []
        self.words = ""
        self.feed(text)
        self.close()
        assert self.open == []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append(tag)
        self.attributes += attrs
        if tag == "tr":
            self.rows.append([])
        if tag in ("td", "th"):
            self.rows[-1].append("")
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append(tag)
        if tag == "br":
            self.handle_data("\n")

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        self.words += data
        if self.open and self.open[-1] in ("td", "th"):
            self.rows[-1][-1] += data


def test_the_finding_and_every_cell_are_there(full: Results) -> None:
    seen = Seen(fragment(full))
    assert finding_text(full) in seen.words
    table = comparison_table(Material.of(full), full=False)
    assert seen.rows[0] == [column.heading for column in table.columns]
    for got, row in zip(seen.rows[1:], table.rows, strict=True):
        assert got == [(" " if at == 0 else "\n").join(lines(c)) for at, c in enumerate(row)]


@pytest.mark.parametrize("attack", ["<script>alert(1)</script>", '"><img src=x onerror=alert(1)>'])
def test_words_of_the_input_stay_words(full: Results, attack: str) -> None:
    study = replace(
        full.study, title=attack, labels={"paid_in_shares": attack}, groups=(attack, "b")
    )
    seen = Seen(fragment(with_frames(replace(full, study=study))))
    assert attack in seen.words
    assert set(seen.tags) <= {
        "div", "p", "b", "table", "caption", "thead", "tbody", "tr", "th", "td", "small", "br",
    }  # fmt: skip
    assert {name for name, _ in seen.attributes} <= {"lang", "scope"}


def test_a_run_without_columns_shows_its_finding(bare: Results) -> None:
    seen = Seen(fragment(bare))
    assert finding_text(bare) in seen.words
    assert seen.rows == []


def test_a_run_shows_itself_once_it_knows_how(full: Results) -> None:
    assert full._repr_html_() is None
    assert replace(full, look=fragment)._repr_html_() == fragment(full)
