"""The fuzzer's targets on sound files, on what it found, and on files of a known shape.

Longer searches are ``python -m tests.fuzz.run`` and ``FUZZ_EXAMPLES=600 python -m pytest
tests/fuzz``; what they find becomes a case here.
"""

from __future__ import annotations

import csv
import io
import os
import random
from pathlib import Path

import openpyxl
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from pipeline.core.findings import Finding, InputProblem, Severity
from pipeline.inputs.files import read_table
from pipeline.inputs.source import ROW, Source
from tests.fuzz.targets import FOUND, TARGETS, UnworthyRefusal, answered, seeds

# FUZZ_EXAMPLES asks for so many new examples of each property, in the place of a few known ones.
EXAMPLES = int(os.environ.get("FUZZ_EXAMPLES", "0"))
SOME = settings(
    max_examples=EXAMPLES or 25,
    deadline=None,
    derandomize=not EXAMPLES,
    suppress_health_check=[HealthCheck.function_scoped_fixture],
)


@pytest.mark.parametrize("kind", TARGETS)
def test_sound_files_and_broken_ones(kind: str, tmp_path: Path) -> None:
    """Each seed whole, cut short, with a byte changed and with a part doubled."""
    stream = random.Random(kind)
    for seed in seeds()[kind]:
        at, other = sorted(stream.sample(range(len(seed) + 1), 2))
        changed = bytearray(seed)
        changed[min(at, len(seed) - 1)] ^= 1 << stream.randrange(8)
        for data in (seed, seed[:other], bytes(changed), seed[:other] + seed[at:]):
            TARGETS[kind](data, tmp_path)


@pytest.mark.parametrize("name", FOUND)
def test_what_was_found(name: str, tmp_path: Path) -> None:
    kind, data = FOUND[name]
    TARGETS[kind](data, tmp_path)


def test_a_fault_would_be_seen(tmp_path: Path) -> None:
    """A reader's own error goes through, and so does a refusal that does not help."""

    def broken() -> None:
        raise IndexError

    def unhelpful() -> None:
        raise InputProblem([Finding("unreadable_file", Severity.ERROR, "a.csv", "", "", "")])

    with pytest.raises(IndexError):
        answered(broken)
    with pytest.raises(UnworthyRefusal):
        answered(unhelpful)


words = st.text(st.characters(codec="utf-8", exclude_characters="\0\r", exclude_categories=["Cs"]))
cells = st.one_of(st.sampled_from(["", "1", "-2.5", '"', ",", ";", "\n", "a,b", "=1"]), words)
tables = st.integers(1, 4).flatmap(
    lambda width: st.lists(
        st.lists(cells, min_size=width, max_size=width), min_size=1, max_size=6
    )
)  # fmt: skip


def written(rows: list[list[str]], mark: str) -> tuple[list[list[str]], str]:
    """The rows under an identifier each, and the file that Python's own writer makes of them."""
    made = io.StringIO()
    header = ["deal_id", *(f"column_{at}" for at in range(len(rows[0])))]
    named = [[f"D{at}", *row] for at, row in enumerate(rows)]
    csv.writer(made, delimiter=mark, lineterminator="\n").writerows([header, *named])
    return named, made.getvalue()


@SOME
@given(tables, st.sampled_from([",", ";", "\t", "|"]), st.sampled_from(["utf-8", "utf-16"]))
def test_what_a_csv_library_writes_is_read_cell_by_cell(
    tmp_path: Path, rows: list[list[str]], mark: str, encoding: str
) -> None:
    """RFC 4180: any text in any cell comes back, on the row that a spreadsheet shows.

    Without a declared mark it comes back too, or is refused: never other cells.
    """
    named, text = written(rows, mark)
    path = tmp_path / "deals.csv"
    path.write_bytes(text.encode(encoding))
    table = read_table(Source("deals", path, delimiter=mark, encoding=encoding))
    assert table[ROW].tolist() == list(range(2, 2 + len(rows)))
    assert table.drop(columns=ROW).fillna("").to_numpy().tolist() == named
    try:
        told = read_table(Source("deals", path, encoding=encoding))
    except InputProblem:
        return
    assert told.drop(columns=ROW).fillna("").to_numpy().tolist() == named


values = st.one_of(
    st.none(),
    st.integers(-(10**12), 10**12),
    st.floats(-1e9, 1e9, allow_nan=False),
    st.booleans(),
    st.dates(),
    st.datetimes(timezones=st.none()),
    st.text(st.characters(min_codepoint=32, max_codepoint=0x2FFF), max_size=20),
    st.sampled_from(["=1/0", "#REF!", "=A1", "2021-03-08 10:00", "XLON", "nan"]),
)


@SOME
@given(st.lists(st.lists(values, max_size=9), max_size=6), st.integers(0, 255))
def test_a_workbook_of_any_cells_is_read_or_refused(
    tmp_path: Path, rows: list[list[object]], how: int
) -> None:
    """Cells of every type in every place, through each reader that a study may choose."""
    book = openpyxl.Workbook()
    heads = ["deal_id", "security", "exchange", "announced_at", "date", "close", "shares"]
    book.active.append(heads[how % 3 :])
    for row in rows:
        book.active.append([None if _unwritable(cell) else cell for cell in row])
    made = io.BytesIO()
    book.save(made)
    TARGETS["xlsx"](bytes([240 + how % 15]) + made.getvalue(), tmp_path)


def _unwritable(cell: object) -> bool:
    return isinstance(cell, str) and bool(openpyxl.cell.cell.ILLEGAL_CHARACTERS_RE.search(cell))


@SOME
@given(st.lists(cells, min_size=1, max_size=8), st.integers(0, 255), st.integers(0, 255))
def test_moments_are_read_or_refused(
    tmp_path: Path, lines: list[str], zone: int, form: int
) -> None:
    TARGETS["moments"](bytes([zone, form]) + "\n".join(lines).encode(), tmp_path)
