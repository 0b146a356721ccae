"""A page a deal: names that climb nowhere, words that are no markup, links that arrive."""

from __future__ import annotations

import re
from dataclasses import replace
from pathlib import PurePosixPath

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from lxml import etree

from pipeline.core.findings import Finding, Severity, touching
from pipeline.core.pictures import picture_frames
from pipeline.core.results import Results
from pipeline.report.deal_names import LONGEST, page_links, page_names, page_path
from pipeline.report.deal_pages import documents
from pipeline.report.html import deal_pages
from pipeline.report.material import Material
from pipeline.significance.story import days_of, stories_of

HOSTILE = (
    "../../etc/passwd", "<script>alert(1)</script>", "..", "a\\b", "CON", "index", "deal 1",
    "DEAL-1", "deal-1", "é" * 90, "=1+1", "x\x00y", "\u202eright", "a" * 300, "",
)  # fmt: skip


def with_pages(run: Results, names: tuple[str, ...] = (), most: int = 1000) -> Results:
    """The run with the frames of the deals' pages, its first deals called ``names``."""
    lead = run.abnormal[run.study.models[0]]
    called = (*names, *lead.deals[len(names) :])
    lead = replace(lead, deals=called)
    days = days_of(lead, 0.95, set(called))
    rows = {
        "deal_stories": stories_of(lead, run.study.headline, 0.95, days),
        "deal_fits": [
            {"deal": name, "column": "Plain", "observed": 0.01, "fitted": 0.004, "residual": 0.006}
            for name in called
        ],
        "deal_findings": [
            {"deal": called[0], "rule": "unknown_variable", "severity": "note",
             "where": "<i>deals</i>, row 2", "got": "<b>got</b>", "remedy": "nothing"}
        ],
    }  # fmt: skip
    deals = run.deals.assign(deal=list(called), security="<img src=x>", exchange="XNYS",
                             day_zero_reason="Public & <early>", timing="during the session",
                             announced_local="2020-01-01 10:00", day_zero="2020-01-01",
                             day_zero_close="16:00")  # fmt: skip
    tables = {**run.tables, **picture_frames(rows), "deal_days": days, "deals": deals}
    return replace(run, study=replace(run.study, deal_pages=most), deals=deals, tables=tables)


@given(st.lists(st.one_of(st.sampled_from(HOSTILE), st.text(max_size=80)), unique=True))
def test_names_are_plain_and_differ_on_every_file_system(deals: list[str]) -> None:
    names = page_names(deals)
    assert set(names) == set(deals)
    for name in names.values():
        assert re.fullmatch(r"[A-Za-z0-9][A-Za-z0-9_-]*", name)
        assert len(name) < 2 * LONGEST
        assert name.lower() not in {"con", "nul", "aux", "prn", "index"}
        path = PurePosixPath(page_path(name))
        assert path.parts == ("deals", f"{name}.html")
    assert len({name.lower() for name in names.values()}) == len(deals)


def test_a_plain_identifier_is_its_own_name() -> None:
    assert page_names(["D001", "deal_2", "X-3"]) == {n: n for n in ("D001", "deal_2", "X-3")}


def test_an_identifier_is_neither_markup_nor_a_path(full: Results) -> None:
    run = with_pages(full, HOSTILE)
    pages = deal_pages(run)
    assert all(re.fullmatch(r"deals/[A-Za-z0-9_-]+\.html", name) for name in pages)
    allowed = set()
    for name, content in pages.items():
        tree = etree.fromstring(content.split(b"\n", 1)[1])
        tags = {etree.QName(node).localname for node in tree.iter() if isinstance(node.tag, str)}
        assert not tags & {"script", "img", "i", "link", "iframe"}, name
        allowed |= {
            node.get("href") for node in tree.iter("{*}a") if not node.get("download")
        } - {None}  # fmt: skip
    for link in allowed:
        assert link is not None
        target = link.removeprefix("#") if link.startswith("#") else link
        if not link.startswith("#") and link != "../report.html":
            assert f"deals/{target}" in pages


def test_pages_lead_to_the_deal_before_and_the_one_after(full: Results) -> None:
    run = with_pages(full, most=3)
    found = dict(documents(run, 3))
    assert list(found) == ["index", *list(run.deals["deal"])[:3]]
    first, second, third = list(run.deals["deal"])[:3]
    ways = [words for words, _ in found[second].ways]
    assert ways == ["All deals", "Report", f"Before: {first}", f"Next: {third}"]
    assert not any(words.startswith("Next") for words, _ in found[third].ways)
    told = " ".join(p.text for p in found["index"].paragraphs)
    assert "first 3 deals" in told
    linked = [row[0].href for row in found["index"].tables[0].rows]
    assert linked == [f"{deal}.html" for deal in (first, second, third)]


def test_every_number_of_the_prose_stands_in_a_table(full: Results) -> None:
    run = with_pages(full)
    for name, document in documents(run, 5):
        for paragraph in document.paragraphs:
            for quoted in paragraph.quotes:
                frame = run.tables.get(quoted.table)
                assert frame is not None or quoted.table == "headline"
                rows = frame if frame is not None else Material.of(run).frames["headline"]
                for column, key in quoted.where:
                    rows = rows[rows[column] == key]
                assert rows[quoted.column].tolist() == [quoted.value], name
            own = paragraph.own_text
            for quoted in paragraph.quotes:
                own = own.replace(quoted.text, "", 1)
            assert not re.search(r"\d", own), own


def test_the_picture_draws_what_the_table_holds(full: Results) -> None:
    run = with_pages(full)
    for name, document in list(documents(run, 4))[1:]:
        (figure,) = document.figures
        own = run.tables["deal_days"][run.tables["deal_days"]["deal"] == name]
        np.testing.assert_allclose(figure.data["abnormal_bp"], own["abnormal_return"] * 1e4)
        np.testing.assert_allclose(figure.data["band_bp"], own["reach"] * 1e4)
        outside = (own["abnormal_return"].abs() > own["reach"]).sum()
        assert figure.title.text.startswith(f"{outside} of {len(own)} sessions lie outside")


def test_no_page_without_deals_or_if_none_is_asked_for(full: Results, bare: Results) -> None:
    assert not deal_pages(with_pages(full, most=0))
    assert not page_links(Material.of(full))
    pages = deal_pages(replace(bare, study=replace(bare.study, deal_pages=9)))
    assert set(pages) == {"deals/index.html", f"deals/{bare.deals['deal'][0]}.html"}


@pytest.mark.parametrize(
    ("row", "deals"),
    [("12", ["B"]), ("11–13", ["A", "B", "C"]), ("11, 13 and 9 more", ["A", "C"]), ("", []),
     ("112", [])],
)  # fmt: skip
def test_findings_about_a_deals_own_row(row: str, deals: list[str]) -> None:
    item = Finding("r", Severity.NOTE, "deals", "got", "expected", "remedy", row=row)
    other = replace(item, file="prices")
    rows = {"A": 11, "B": 12, "C": 13}
    found = [deal for deal, _ in touching([item, other], rows, ("deals",))]
    assert found == deals


def test_values_lie_where_the_quartiles_say(full: Results) -> None:
    run = with_pages(full)
    frame = pd.DataFrame(
        {"variable": ["market_value"], "n": [60], "lower": [1e-9], "median": [1.0], "upper": [2.0]}
    )
    run = replace(run, tables={**run.tables, "quartiles": frame})
    _, (_, document) = list(documents(run, 1))
    table = next(t for t in document.tables if t.name == "characteristics")
    value = float(run.deals["market_value"].iloc[0])
    place = "highest quarter" if value > 2 else "middle half"
    assert getattr(table.rows[0][-1], "text", "") == place
