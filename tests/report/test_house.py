"""The house's style in the documents: dates, stars, brackets, decimals, money, logo and names.

Dates are held against Babel, which reads the Unicode Common Locale Data Repository.
"""

from __future__ import annotations

import io
import re
import zipfile
from dataclasses import replace
from datetime import date, timedelta

import openpyxl
import pytest
from babel.dates import format_date
from lxml import etree

from pipeline.core.estimate import Estimate
from pipeline.core.house import House, Reviewer
from pipeline.core.outcome import with_decimals
from pipeline.core.results import Results
from pipeline.report import docx, html, tex, xlsx
from pipeline.report.content import report
from pipeline.report.days import day_of, day_words, redated
from pipeline.report.document import Bracketed, Interval, Table
from pipeline.report.memo import memo
from pipeline.report.numerals import bp_digits, lines
from pipeline.report.wording import stars
from tests.report.kitchen import logo
from tests.report.runs import with_frames

LOCALES = {"english": "en_GB", "american": "en_US", "german": "de", "french": "fr"}


def housed(run: Results, **style: object) -> Results:
    house = House(**style)  # type: ignore[arg-type]
    outcome = with_decimals(run.study.outcome, house.decimals)
    return with_frames(replace(run, study=replace(run.study, house=house, outcome=outcome)))


def table(run: Results, name: str) -> Table:
    return next(t for t in report(run).tables if t.name == name)


@pytest.mark.parametrize("dates", LOCALES)
def test_dates_are_those_of_the_locale(dates: str) -> None:
    for at in range(0, 366, 5):
        day = date(2024, 1, 2) + timedelta(at)
        if dates == "french" and day.day == 1:
            continue  # the repository writes 1 mars, French usage 1er mars
        assert day_words(day, dates) == format_date(day, "long", locale=LOCALES[dates])


def test_the_first_of_a_french_month() -> None:
    assert day_words(date(2024, 3, 1), "french") == "1er mars 2024"


def test_dates_inside_words() -> None:
    text = "from 2024-03-08 17:45 to 2024-12-31."
    assert redated(text, "german") == "from 8. März 2024 17:45 to 31. Dezember 2024."
    assert redated(text, "iso") == text
    for other in ("D2024-03-08", "2024-03-081", "2023-02-29", "a/2024-03-08.csv", "12024-03-08"):
        assert redated(other, "german") == other
    assert day_of("2024-03-08") == date(2024, 3, 8)
    assert day_of("on 2024-03-08") is None


def test_dates_of_the_run_are_shown_and_the_analyst_is_quoted(full: Results) -> None:
    asked = replace(full.study, question="Since 2024-03-08?")
    run = housed(replace(full, study=asked), dates="german")
    texts = "\n".join(p.text for p in report(run).paragraphs)
    cells = "\n".join(line for t in report(run).tables for row in t.rows for cell in row
                      for line in lines(cell))  # fmt: skip
    assert "Since 2024-03-08?" in texts
    assert re.search(r"\d\. [A-ZÄ]\w+ 20\d\d", cells)
    found = table(run, "findings")
    assert found.rows == table(full, "findings").rows


@pytest.mark.parametrize(
    ("p", "mark"),
    [(0.5, ""), (0.1, ""), (0.0999, "*"), (0.05, "*"), (0.0499, "**"), (0.0099, "***")],
)
def test_stars(p: float, mark: str) -> None:
    assert stars(p) == mark


def test_no_star_unless_asked_for(full: Results) -> None:
    for row in table(full, "comparison").rows:
        assert "*" not in "".join(line for cell in row for line in lines(cell))


def test_stars_follow_the_p_value_and_spare_sets_of_their_own(full: Results) -> None:
    comparison = table(housed(full, stars=True), "comparison")
    row = comparison.rows[0]
    for column, cell in zip(full.columns, row[1:], strict=True):
        if not isinstance(column, Estimate):
            assert cell is None
            continue
        shown = lines(cell)[0]
        if column.robust_set is not None:
            assert not shown.endswith("*")
        else:
            p = column.term(column.treatment)["p_value"]
            assert shown.count("*") == sum(p < limit for limit in (0.1, 0.05, 0.01))
    notes = " ".join(note.text for note in comparison.notes)
    assert "* p < 10%, ** p < 5%, *** p < 1%" in notes
    assert "carries no star" in notes


@pytest.mark.parametrize(
    ("brackets", "key", "scale", "digits"),
    [("t value", "statistic", 1, 2), ("standard error", "std_error", 1e4, None)],
)
def test_what_stands_in_brackets(
    full: Results, brackets: str, key: str, scale: float, digits: int | None
) -> None:
    run = housed(full, brackets=brackets)
    comparison = table(run, "comparison")
    columns = zip(full.columns, comparison.rows[0][1:], strict=True)
    kinds = set()
    for column, cell in columns:
        if not isinstance(column, Estimate):
            continue
        kinds.add(type(cell))
        if column.robust_set is not None:
            assert isinstance(cell, Interval)
            continue
        value = float(column.term(column.treatment)[key]) * scale
        places = bp_digits(value) if digits is None else digits
        assert isinstance(cell, Bracketed)
        assert lines(cell)[1] == f"({value:,.{places}f})".replace("-", "−")
    assert kinds == {Bracketed, Interval}
    assert brackets in " ".join(note.text for note in comparison.notes)


@pytest.mark.parametrize(
    ("error", "most", "digits"),
    [
        (25.0, 3, 0),
        (2.5, 3, 1),
        (0.25, 3, 2),
        (0.0025, 3, 3),
        (25.0, 0, 0),
        (2.5, 0, 0),
        (0.3, 0, 2),
    ],
)
def test_never_more_digits_than_the_error_deserves(error: float, most: int, digits: int) -> None:
    """Two digits of the error: 25 leaves none behind the point, 2.5 one, .25 two."""
    assert bp_digits(error, most) == digits


def test_fewer_decimals_when_asked_for(full: Results) -> None:
    def first(run: Results) -> str:
        return lines(table(run, "comparison").rows[1][1])[0]

    assert "." in first(full)
    assert "." not in first(housed(full, decimals=0))
    assert first(housed(full, decimals=6)) == first(full)


def test_money_is_shown_the_house_s_way_everywhere(full: Results) -> None:
    run = housed(full, money="US$ {} m")
    document = report(run)
    shown = "\n".join([
        *(p.text for p in document.paragraphs),
        *(c.heading for t in document.tables for c in t.columns),
        *(line for t in document.tables for row in t.rows for cell in row for line in lines(cell)),
    ])  # fmt: skip
    assert re.search(r"US\$ −?[\d,.]+ m", shown)
    assert "(US$ m)" in shown
    assert "USD" not in shown


def test_reviewers_sign_under_their_names(full: Results) -> None:
    run = housed(full, reviewers=(Reviewer("Ada Example", "Risk"), Reviewer("Ben Muster", "Law")))
    rows = [[*lines(row[0]), *lines(row[1])] for row in table(run, "sign_off").rows]
    assert rows[2:4] == [["Risk", "Ada Example"], ["Law", "Ben Muster"]]
    assert ["Reviewed by"] not in rows
    assert ["Reviewed by"] in [[*lines(row[0])] for row in table(full, "sign_off").rows]


FOOT = 'Confidential "x" \\ <b> & 100%'


def test_the_footer_stands_in_every_format(full: Results) -> None:
    run = housed(full, footer=FOOT)
    page = html.render(run)["report.html"].decode()
    tree = etree.fromstring(page.split("\n", 1)[1].encode())
    assert "".join(next(tree.iter("{*}footer")).itertext()).strip() == FOOT
    style = next(tree.iter("{*}style")).text or ""
    said = re.search(r'content: "(.*?)"', style)
    assert said is not None
    assert re.sub(r"\\([0-9a-f]+) ", lambda m: chr(int(m[1], 16)), said[1]) == FOOT
    with zipfile.ZipFile(io.BytesIO(docx.render(run)["memo.docx"])) as package:
        footers = [package.read(n).decode() for n in package.namelist() if "footer" in n]
    assert any(FOOT in "".join(etree.fromstring(f.encode()).itertext()) for f in footers)
    book = openpyxl.load_workbook(io.BytesIO(xlsx.render(run)["tables.xlsx"]))
    assert {sheet.oddFooter.left.text for sheet in book} == {FOOT.replace("&", "&&")}
    assert all(tex.escape(FOOT) in text.decode() for text in tex.render(run).values())


def test_the_logo_stands_in_page_memo_and_workbook(full: Results) -> None:
    sign = logo()
    run = housed(full, logo=sign)
    page = html.render(run)["report.html"].decode()
    assert "img-src data:" in page
    assert page.count("<img ") == 1
    assert "img-src" not in html.render(full)["report.html"].decode()
    for data, count in ((docx.render(run)["memo.docx"], 2), (xlsx.render(run)["tables.xlsx"], 1)):
        with zipfile.ZipFile(io.BytesIO(data)) as package:
            media = [n for n in package.namelist() if "/media/" in n]
            assert len(media) == count
            assert sign.data in [package.read(name) for name in media]


def test_the_paper_has_the_size_asked_for(full: Results) -> None:
    run = housed(full, page="Letter")
    assert "size: Letter" in html.render(run)["report.html"].decode()
    book = openpyxl.load_workbook(io.BytesIO(xlsx.render(run)["tables.xlsx"]))
    assert {sheet.page_setup.paperSize for sheet in book} == {1}
    with zipfile.ZipFile(io.BytesIO(docx.file(memo(run)))) as package:
        text = package.read("word/document.xml").decode()
    assert set(re.findall(r'<w:pgSz[^>]*w:w="(\d+)"', text)) == {"12240", "15840"}


def test_dates_are_dates_in_the_workbook(full: Results) -> None:
    for dates, pattern in (("iso", "yyyy-mm-dd"), ("german", "[$-407]d. mmmm yyyy")):
        data = xlsx.render(housed(full, dates=dates))["tables.xlsx"]
        book = openpyxl.load_workbook(io.BytesIO(data))
        found = [
            c for sheet in book for row in sheet.iter_rows() for c in row if c.data_type == "d"
        ]
        assert found
        assert {cell.number_format for cell in found} == {pattern}
