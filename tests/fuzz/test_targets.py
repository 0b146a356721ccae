"""The fuzzer's targets on sound files, on what it found, and on files of a known shape.

A longer search is ``python -m tests.fuzz.run``; what it finds becomes a case here.
"""

from __future__ import annotations

import csv
import io
import random
from pathlib import Path

import openpyxl
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from pipeline.core.findings import Finding, InputProblem, Severity
from pipeline.inputs.files import read_table
from pipeline.inputs.source import ROW, Source
from tests.fuzz.targets import SHEET_PARTS, TARGETS, UnworthyRefusal, answered, seeds

SOME = settings(
    max_examples=40,
    deadline=None,
    derandomize=True,
    suppress_health_check=[HealthCheck.function_scoped_fixture],
)
# Inputs that broke a reader before it was mended, by kind.
FOUND: dict[str, tuple[str, bytes]] = {
    "a sheet without content": ("xlsx", bytes([24])),
    "a style sheet that is no markup": ("xlsx", bytes([26]) + b"no markup"),
}


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


@SOME
@given(tables, st.sampled_from([",", ";", "\t", "|"]), st.sampled_from(["utf-8", "utf-16"]))
def test_what_a_csv_library_writes_is_read_cell_by_cell(
    tmp_path: Path, rows: list[list[str]], mark: str, encoding: str
) -> None:
    """RFC 4180: any text in any cell comes back, on the row that a spreadsheet shows."""
    made = io.StringIO()
    header = ["deal_id", *(f"column_{at}" for at in range(len(rows[0])))]
    given_rows = [[f"D{at}", *row] for at, row in enumerate(rows)]
    csv.writer(made, delimiter=mark, lineterminator="\n").writerows([header, *given_rows])
    path = tmp_path / "deals.csv"
    path.write_bytes(made.getvalue().encode(encoding))
    source = Source("deals", path, delimiter=mark, encoding=encoding)
    table = read_table(source)
    assert table[ROW].tolist() == list(range(2, 2 + len(rows)))
    found = table.drop(columns=ROW).fillna("").to_numpy().tolist()
    assert found == given_rows


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
    assert len(SHEET_PARTS) * 40 == 240


def _unwritable(cell: object) -> bool:
    return isinstance(cell, str) and bool(openpyxl.cell.cell.ILLEGAL_CHARACTERS_RE.search(cell))


@SOME
@given(st.lists(cells, min_size=1, max_size=8), st.integers(0, 255), st.integers(0, 255))
def test_moments_are_read_or_refused(
    tmp_path: Path, lines: list[str], zone: int, form: int
) -> None:
    TARGETS["moments"](bytes([zone, form]) + "\n".join(lines).encode(), tmp_path)
