"""Every renderer's whole output for a document that holds everything, against the kept one.

A change that is meant is kept with ``python -m tests.report.refresh_snapshots``.
"""

from __future__ import annotations

import pytest

from tests.report.refresh_snapshots import SNAPSHOTS, made

NAMES = ("kitchen.html", "kitchen.docx.xml", "kitchen.xlsx.txt", "kitchen.tex", "kitchen.pdf.txt")


@pytest.fixture(scope="module")
def now() -> dict[str, str]:
    return made()


@pytest.mark.parametrize("name", NAMES)
def test_the_whole_output_is_the_kept_one(name: str, now: dict[str, str]) -> None:
    assert now[name].splitlines() == (SNAPSHOTS / name).read_text(encoding="utf-8").splitlines()


def test_nothing_is_kept_without_being_compared(now: dict[str, str]) -> None:
    assert set(now) == set(NAMES) == {path.name for path in SNAPSHOTS.iterdir()}
