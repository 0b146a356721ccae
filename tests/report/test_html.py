"""The page: well-formed, self-contained, escaped, and holding the tables' numbers."""

from __future__ import annotations

import base64
import re
from dataclasses import replace

import pytest
from lxml import etree

from pipeline.core.results import Results
from pipeline.report.content import report
from pipeline.report.document import Table
from pipeline.report.figures import csv
from pipeline.report.html import page
from pipeline.report.numerals import lines
from tests.report.runs import with_frames

ATTACKS = (
    "<script>alert(1)</script>",
    '"><img src=x onerror=alert(1)>',
    "{{ 7*7 }}{% raw %}",
    "a\x00b\x0bc",
    "&lt;b&gt; & ]]>",
)


def parsed(text: str) -> etree._Element:
    return etree.fromstring(text.split("\n", 1)[1].encode())


@pytest.fixture(scope="module")
def tree(files: dict[str, bytes]) -> etree._Element:
    return parsed(files["report.html"].decode())


def all_tags(tree: etree._Element) -> list[str]:
    return [etree.QName(node).localname for node in tree.iter() if isinstance(node.tag, str)]


def test_the_page_asks_for_nothing(files: dict[str, bytes], tree: etree._Element) -> None:
    text = files["report.html"].decode()
    for node in tree.iter():
        for name, value in node.attrib.items():
            local = name.rsplit("}", 1)[-1]
            if local in ("src", "href", "data", "action", "poster", "srcset"):
                assert value.startswith(("#", "data:text/csv;")), (local, value)
    assert not {"script", "link", "iframe", "img", "object", "embed"} & set(all_tags(tree))
    assert not re.search(r"@import|@font-face", text)
    assert not [u for u in re.findall(r"url\(([^)]*)\)", text) if not u.startswith("#")]
    assert "default-src 'none'" in text


def test_the_bare_page_is_well_formed_too(bare_files: dict[str, bytes]) -> None:
    tree = parsed(bare_files["report.html"].decode())
    assert "svg" not in all_tags(tree)
    assert "None." in " ".join(tree.itertext())


def test_ids_are_unique_and_links_arrive(tree: etree._Element) -> None:
    ids = [node.get("id") for node in tree.iter() if node.get("id")]
    assert len(ids) == len(set(ids))
    for node in tree.iter():
        for name, value in node.attrib.items():
            if name.rsplit("}", 1)[-1] == "href" and value.startswith("#"):
                assert value[1:] in ids


def test_each_figure_hands_over_the_numbers_it_draws(full: Results, tree: etree._Element) -> None:
    links = [node for node in tree.iter("{*}a") if node.get("download")]
    for link, figure in zip(links, report(full).figures, strict=True):
        content = base64.b64decode((link.get("href") or "").partition("base64,")[2])
        assert content == csv(figure.data)


def test_the_margin_names_the_table_of_every_quoted_number(tree: etree._Element) -> None:
    notes = [
        " ".join(node.itertext()) for node in tree.iter("{*}div") if node.get("role") == "note"
    ]
    tables = {(node.get("title") or "").split(".")[0] for node in tree.iter("{*}data")}
    assert len(notes) > 5
    for table in tables:
        assert any(table in note for note in notes)


def test_pictures_are_inside_and_described(tree: etree._Element) -> None:
    pictures = list(tree.iter("{http://www.w3.org/2000/svg}svg"))
    assert len(pictures) == 4
    for picture in pictures:
        assert picture.get("role") == "img"
        assert len(picture.get("aria-label") or "") > 30


def test_every_cell_of_every_table_is_printed(full: Results, tree: etree._Element) -> None:
    tables = list(tree.iter("{http://www.w3.org/1999/xhtml}table"))
    expected = [t for t in report(full).tables if t.rows]
    assert len(tables) == len(expected)
    for printed, table in zip(tables, expected, strict=True):
        body = printed.findall(".//{*}tbody/{*}tr")
        assert len(body) == len(table.page_rows)
        for row, cells in zip(body, table.page_rows, strict=True):
            found = [tuple("".join(s.itertext()) for s in c.findall("{*}span")) for c in row]
            assert found == [lines(cell) for cell in cells]


def test_blank_cells_stay_blank(full: Results, tree: etree._Element) -> None:
    table = next(t for t in report(full).tables if t.name == "comparison")
    withheld = [row[3] for row in table.rows]
    filled = [cell for cell in withheld if cell is not None]
    assert len(filled) == 1
    blanks = [c for c in tree.iter("{*}td") if not "".join(c.itertext()).strip()]
    assert len(blanks) >= len(withheld) - 1


def test_numbers_in_prose_say_where_they_stand(tree: etree._Element) -> None:
    quoted = list(tree.iter("{http://www.w3.org/1999/xhtml}data"))
    assert len(quoted) > 40
    for node in quoted:
        assert re.match(r"data/\w+\.parquet: \w+ where ", node.get("title") or "")
        float(node.get("value") or "")


@pytest.mark.parametrize("attack", ATTACKS)
def test_words_of_the_input_stay_words(full: Results, attack: str) -> None:
    study = replace(
        full.study, title=attack, question=attack, groups=(attack, "b"),
        rationales={attack: attack}, labels={"paid_in_shares": attack}, notes=(attack,),
        currency=attack, headline_test_reason=attack,
    )  # fmt: skip
    paths = full.paths.replace({"paid in cash": attack})
    diagnostics = full.diagnostics.assign(meaning=attack, subject=attack, threshold=attack)
    run = with_frames(replace(full, study=study, paths=paths, diagnostics=diagnostics))
    text = page(report(run))
    tree = parsed(text)
    assert not {"script", "img"} & set(all_tags(tree))
    assert "onerror" not in {name for node in tree.iter() for name in node.attrib}
    assert "\x00" not in text
    shown = " ".join(tree.itertext())
    assert attack.replace("\x00", "").replace("\x0b", "") in shown


def test_a_shortened_table_says_so(full: Results) -> None:
    def only_ledger(run: Results) -> Table:
        return next(t for t in report(run).tables if t.name == "ledger")

    assert not only_ledger(full).shortened
    stage = full.ledger.stages[-1]
    many = replace(stage, entries=tuple(
        replace(stage.entries[3], deal=f"X{i}") for i in range(60)))  # fmt: skip
    ledger = replace(full.ledger, stages=(full.ledger.stages[0], many))
    run = with_frames(replace(full, ledger=ledger))
    assert only_ledger(run).shortened
    assert "all of them stand in tables.xlsx" in page(report(run))


def test_the_analyst_s_argument_is_printed_as_written(full: Results, tree: etree._Element) -> None:
    said = ["".join(node.itertext()) for node in tree.iter("{*}blockquote")]
    for heading, text in full.study.rationales.items():
        assert any(heading in block and text in block for block in said)


def test_the_cautions_are_on_the_page(tree: etree._Element) -> None:
    text = " ".join(tree.itertext())
    for words in ("not advice", "do not predict", "gross of costs", "closing prices used",
                  "public information", "restricted list", "securities law", "compliance",
                  "Distribution class", "Reviewed by"):  # fmt: skip
        assert words in text
