"""Every number in prose is a quoted one, and each quote is found again where it says it stands.

The look-up and the rounding here are written anew, apart from the code under test.
"""

from __future__ import annotations

import re
from collections.abc import Hashable, Iterator
from dataclasses import replace
from decimal import ROUND_HALF_EVEN, Decimal
from functools import cache
from typing import Any

import pandas as pd
import pytest

from pipeline.core.estimate import Shape, Withheld
from pipeline.core.results import Results
from pipeline.report.content import report
from pipeline.report.document import Document, Paragraph, Quote, Verbatim
from pipeline.report.headline import headline_frame
from pipeline.report.material import quote
from pipeline.report.memo import memo
from tests.report.doubted import doubted_run
from tests.report.runs import bare_run, estimate, full_run, shaped, with_columns

NUMBER = re.compile(r"\d(?:[\d,]*\d)?(?:\.\d+)?")
SIGNED = re.compile(r"[<+−-]?" + NUMBER.pattern)


def runs() -> dict[str, Results]:
    sole = estimate("Alone", -0.01)
    return {
        "full": full_run(),
        "bare": bare_run(),
        **{shape.name: shaped(shape) for shape in Shape},
        "one column": with_columns(full_run(), sole),
        "two columns": with_columns(full_run(), sole, estimate("Other", 0.02)),
        "withheld lead": with_columns(full_run(), Withheld("a", "A", "it has 1 cluster"), sole),
        "no lead": with_columns(full_run(), sole, lead=-1),
        "doubted": doubted_run(),
    }


RUNS = runs()
KINDS = {"report": report, "memo": memo}


@cache
def document_of(name: str, kind: str) -> Document:
    return KINDS[kind](RUNS[name])


def documents() -> list[Document]:
    return [document_of(name, kind) for name in RUNS for kind in KINDS]


@pytest.fixture(params=[(name, kind) for name in RUNS for kind in KINDS], ids=", ".join)
def case(request: pytest.FixtureRequest) -> tuple[Results, Document]:
    return RUNS[request.param[0]], document_of(*request.param)


def rows_of(run: Results) -> dict[str, list[dict[Hashable, Any]]]:
    frames = {**run.tables, "headline": headline_frame(run)}
    wanted = [name for name in ("event_tests", "estimates", "headline", "breakdowns")
              if name in frames]  # fmt: skip
    return {name: frames[name].to_dict("records") for name in wanted}


def quotes(document: Document) -> Iterator[Quote]:
    for paragraph in document.paragraphs:
        yield from paragraph.quotes


def look_up(rows: dict[str, list[dict[Hashable, Any]]], found: Quote) -> float:
    values = {
        row[found.column]
        for row in rows[found.table]
        if all(row[name] == key for name, key in found.where)
    }
    assert len(values) == 1, f"{found} stands at {len(values)} places"
    return float(values.pop())


def rounded(value: float, scale: float, digits: int) -> Decimal:
    step = Decimal(1).scaleb(-digits)
    return Decimal(value * scale).quantize(step, rounding=ROUND_HALF_EVEN)


def test_every_number_in_prose_is_quoted(case: tuple[Results, Document]) -> None:
    _, document = case
    paragraphs = list(document.paragraphs)
    assert paragraphs
    for paragraph in paragraphs:
        numbers = [re.sub("[<+−-]", "", n) for n in SIGNED.findall(paragraph.own_text)]
        texts = [re.sub("[<+−-]", "", q.text) for q in paragraph.quotes]
        assert numbers == texts, paragraph.own_text


def test_each_quote_is_the_number_of_its_table(case: tuple[Results, Document]) -> None:
    run, document = case
    rows = rows_of(run)
    for found in quotes(document):
        value = look_up(rows, found)
        if found.text.startswith("<"):
            assert 0 <= value < float(found.text[1:])
            continue
        printed = Decimal(found.text.replace("−", "-").replace(",", ""))
        assert printed == rounded(value, found.scale, found.digits), found


def test_words_taken_over_stand_in_the_run(case: tuple[Results, Document]) -> None:
    """Numbers inside verbatim words come from the run's own sentences, not from the report's."""
    run, document = case
    source = spoken_by(run)
    for paragraph in document.paragraphs:
        for piece in paragraph.pieces:
            if isinstance(piece, Verbatim):
                for number in NUMBER.findall(piece.text):
                    assert number in source, (number, piece)


def spoken_by(run: Results) -> str:
    columns = [str(vars_of(column)) for column in run.columns]
    tests = [str(t) for entry in run.window_tests for t in entry.tests.values()]
    parts = [str(run.study), *columns, *tests, run.diagnostics.to_string(),
             str(run.findings), run.sensitivity.to_string(),
             *(str(run.tables[name].to_dict("list")) for name in ("breakdowns",)
               if name in run.tables)]  # fmt: skip
    return " ".join(parts)


def vars_of(column: Any) -> list[Any]:
    stages = [vars_of(stage) for stage in getattr(column, "stages", ())]
    return [*(getattr(column, name) for name in column.__slots__), *stages]


def test_headings_hold_no_numbers_of_their_own() -> None:
    for document in (report(RUNS["full"]), memo(RUNS["full"])):
        assert not [s.heading for s in document.sections if NUMBER.search(s.heading)]


def test_the_proof_would_notice_an_unquoted_number(full: Results) -> None:
    planted = Paragraph(("The mean was 12 bp.",))
    assert NUMBER.findall(planted.own_text) != [q.text for q in planted.quotes]


def test_prose_follows_the_frames(full: Results) -> None:
    """A number changed in the frame changes in the sentence: nothing is computed on the side."""
    tests = full.tables["event_tests"].assign(mean=-0.0777)
    changed = replace(full, tables={**full.tables, "event_tests": tests})
    assert "−777 bp" in report(changed).sections[0].blocks[0].text  # type: ignore[union-attr]
    assert "−777 bp" not in report(full).sections[0].blocks[0].text  # type: ignore[union-attr]


def test_a_quote_from_nowhere_is_refused() -> None:
    frame = {"t": pd.DataFrame({"k": [1, 1, 2], "v": [0.5, 0.6, 0.7]})}
    assert quote(frame, "t", "v", {"k": 2}, digits=1).text == "0.7"
    with pytest.raises(KeyError, match="no row"):
        quote(frame, "t", "v", {"k": 3})
    with pytest.raises(ValueError, match="2 values"):
        quote(frame, "t", "v", {"k": 1})
    with pytest.raises(KeyError):
        quote(frame, "t", "w", {"k": 2})


def test_prose_makes_no_claim_of_cause() -> None:
    forbidden = re.compile(r"\b(proves?|proof|causes?|caused|causal|significant)\b", re.IGNORECASE)
    for document in documents():
        for paragraph in document.paragraphs:
            own = " ".join(p for p in paragraph.pieces if isinstance(p, str))
            assert not forbidden.search(own), own


def test_no_number_is_written_in_powers_of_ten() -> None:
    power = re.compile(r"\d[eE][+-]?\d")
    for document in documents():
        assert not [q for q in quotes(document) if power.search(q.text)]
