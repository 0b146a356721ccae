"""All documents together: names, stability, empty parts, and what importing the package costs."""

from __future__ import annotations

import hashlib
import os
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import pandas as pd
import pytest

from pipeline.core.estimate import Shape, Withheld
from pipeline.core.results import Results
from pipeline.report import docx, html
from pipeline.report.content import report
from pipeline.report.document import Column, Paragraph, Table
from pipeline.report.headline import COLUMNS, headline_frame
from pipeline.report.memo import memo
from tests.report.runs import full_run, shaped, with_columns, with_frames

ROOT = Path(__file__).resolve().parents[2]


def digest(files: dict[str, bytes]) -> str:
    lines = (f"{name} {hashlib.sha256(data).hexdigest()}" for name, data in sorted(files.items()))
    return "\n".join(lines)


def test_names_of_the_documents(files: dict[str, bytes]) -> None:
    assert {"report.html", "memo.docx", "tables.xlsx"} <= set(files)
    figures = {name for name in files if name.startswith("figures/")}
    stems = {name.rsplit(".", 1)[0] for name in figures}
    assert figures == {f"{stem}.{end}" for stem in stems for end in ("svg", "csv")}
    assert not [name for name in files if ".." in name or name.startswith("/")]


def test_the_same_results_give_the_same_bytes(files: dict[str, bytes]) -> None:
    """Also in another process, whose hashes are salted otherwise."""
    code = (
        "import hashlib;from tests.report.runs import full_run;"
        "from tests.report.test_documents import digest;"
        "from pipeline.report.bundle import documents;print(digest(documents(full_run())));"
        "import sys;assert 'matplotlib' not in sys.modules"
    )
    environment = {**os.environ, "PYTHONHASHSEED": "4242", "PYTHONPATH": str(ROOT)}
    done = subprocess.run([sys.executable, "-c", code], cwd=ROOT, env=environment,
                          capture_output=True, text=True, check=True)  # fmt: skip
    assert done.stdout.strip() == digest(files)


def test_importing_the_package_loads_nothing_heavy() -> None:
    heavy = ("matplotlib", "docx", "xlsxwriter", "jinja2", "pandas", "numpy")
    code = f"import sys, pipeline.report; print([n for n in {heavy!r} if n in sys.modules])"
    done = subprocess.run([sys.executable, "-c", code], cwd=ROOT, capture_output=True, text=True,
                          check=True)  # fmt: skip
    assert done.stdout.strip() == "[]"


@pytest.mark.parametrize("part", ["paths", "diagnostics", "sensitivity", "deals", "abnormal"])
def test_any_part_may_be_empty(full: Results, part: str) -> None:
    empty = {} if part == "abnormal" else getattr(full, part).iloc[:0]
    run = with_frames(replace(full, **{part: empty}))
    assert len(html.render(run)["report.html"]) > 10_000
    assert len(docx.render(run)["memo.docx"]) > 10_000


def test_all_columns_withheld(full: Results) -> None:
    run = with_columns(full, Withheld("a", "A", "no cluster"), Withheld("b", "B", "no rank"))
    text = html.render(run)["report.html"].decode()
    assert "no cluster" in text
    assert "gives no number" in text


def test_the_order_of_the_report(full: Results) -> None:
    headings = [section.heading for section in report(full).sections if section.level == 2]
    assert headings == [
        "Finding", "Question, population and conventions", "From the deal list to the sample",
        "Is the reaction real", "The feature, side by side", "First stages and identification",
        "Economic size", "Diagnostics", "Sensitivity", "Limits", "Cautions", "Appendix",
    ]  # fmt: skip


def test_the_memo_is_the_shorter_one(full: Results) -> None:
    def length(paragraphs: list[Paragraph]) -> int:
        return sum(paragraph.words for paragraph in paragraphs)

    short, long = memo(full), report(full)
    assert length(list(short.paragraphs)) < length(list(long.paragraphs))
    assert len(short.figures) == 1
    assert [t.name for t in short.tables] == [
        "answers",
        "sign_off",
        "settings",
        "comparison",
    ]


def test_the_ledger_adds_up_in_the_table_of_losses(full: Results) -> None:
    table = next(t for t in report(full).tables if t.name == "attrition")
    rows = [[getattr(cell, "value", getattr(cell, "text", None)) for cell in row]
            for row in table.rows]  # fmt: skip
    assert rows == [
        ["Deal list", 64, "Exact duplicate row", 1, 63],
        ["Estimation window", 63, "all reasons", 3, 60],
        [None, None, "Too few returns before the deal", 2, None],
        [None, None, "Too many unchanged prices before the deal", 1, None],
    ]


def test_the_headline_frame_has_one_row_a_name(full: Results, bare: Results) -> None:
    for run in (full, bare, *(shaped(shape) for shape in Shape)):
        frame = headline_frame(run)
        assert tuple(frame.columns) == COLUMNS
        assert frame["name"].is_unique
        numbers = frame[["value", "ci_low", "ci_high", "level"]]
        assert (numbers.dtypes == "float64").all()


def test_money_and_set_of_the_headline_frame() -> None:
    run = full_run()
    frame = headline_frame(run).set_index("name")
    effect, money = frame.loc["feature_effect"], frame.loc["feature_money"]
    median = run.deals["market_value"].median()
    assert effect["shape"] == money["shape"] == "two rays"
    for side in ("value", "ci_low", "ci_high"):
        assert money[side] == pytest.approx(effect[side] * median, rel=1e-12)
    assert frame.loc["deals_kept", "value"] == 60


def test_a_frame_made_by_the_run_is_used_as_it_is(full: Results) -> None:
    frame = headline_frame(full)
    frame.loc[frame["name"] == "deals_read", "value"] = 777.0
    run = replace(full, tables={**full.tables, "headline": frame})
    assert "Deals read: 777" in "\n".join(p.text for p in report(run).paragraphs)


def test_a_table_with_a_short_row_is_refused() -> None:
    with pytest.raises(ValueError, match="2 cells"):
        Table("t", Paragraph(("t",)), (Column("a"), Column("b")), ((None,),))


def test_variables_say_what_they_are(full: Results) -> None:
    table = next(t for t in report(full).tables if t.name == "variables")
    rows = {row[1].text: [getattr(c, "text", getattr(c, "value", None)) for c in row]  # type: ignore[union-attr]
            for row in table.rows}  # fmt: skip
    assert rows["leverage"][2] == "control and decision to announce"
    assert rows["leverage"][3] == pytest.approx(full.deals["leverage"].mean())
    assert rows["divisions_for_sale"][3:] == [None] * 5


def test_sources_are_listed_once(full: Results) -> None:
    section = next(s for s in report(full).sections if s.heading == "Sources of the formulas")
    texts = [item.text for item in section.blocks[0].items]  # type: ignore[union-attr]
    assert len(texts) == len(set(texts))
    assert "Ramsey 1969" in texts
    assert isinstance(full.tables["estimates"], pd.DataFrame)
