"""Small input tables and files of every kind made from them."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pandas as pd
import pytest

from pipeline.core.findings import Finding, InputProblem
from pipeline.inputs.files import Source
from pipeline.inputs.read import Tables, read_inputs
from pipeline.inputs.wanted import Wanted

Frames = dict[str, pd.DataFrame]
WANTED = Wanted(
    deal_numbers=("shares", "market_value"),
    deal_texts=("industry",),
    candidate_numbers=("leverage",),
)


def frames() -> Frames:
    """Three deals, their prices, a benchmark, candidates and factors; all as text."""
    return {
        "deals": _deals(),
        "prices": pd.DataFrame(
            {
                "security": ["A", "A", "B", "C"],
                "date": ["2021-03-01", "2021-03-02", "2021-03-01", "2021-03-01"],
                "close": ["10", "11", "20", "30"],
                "volume": ["100", "", "5", "6"],
            }
        ),
        "benchmarks": pd.DataFrame(
            {
                "exchange": ["XLON", "XLON", "XNYS"],
                "date": ["2021-03-01", "2021-03-02", "2021-03-01"],
                "close": ["1000", "1001", "2000"],
            }
        ),
        "candidates": pd.DataFrame(
            {
                "security": ["A", "B", "D"],
                "exchange": ["XLON", "XNYS", "XLON"],
                "year": ["2021", "2021", "2021"],
                "as_of": ["2020-12-31", "2020-12-31", "2020-12-31"],
                "deal_id": ["D1", "D2", ""],
                "leverage": ["0.2", "0.3", "0.4"],
            }
        ),
        "factors": pd.DataFrame(
            {
                "exchange": ["XLON", "XLON"],
                "date": ["2021-03-01", "2021-03-02"],
                "size": ["0.001", "-0.002"],
            }
        ),
    }


def _deals() -> pd.DataFrame:
    return pd.DataFrame(
        {
            "deal_id": ["D1", "D2", "D3"],
            "security": ["A", "B", "A"],
            "exchange": ["XLON", "XNYS", "XLON"],
            "announced_at": ["2021-03-01 08:00", "2021-03-02T10:00+01:00", "2021-06-01"],
            "timestamp_zone": ["Europe/London", "", ""],
            "currency": ["GBP", "GBP", "GBP"],
            "market_value": ["100.5", "", "300"],
            "shares": ["1", "0", "1"],
            "industry": ["jam", "tin", "jam"],
            "notes": ["=SUM(1)", "x", ""],
        }
    )


def write_csv(table: pd.DataFrame, path: Path) -> Path:
    table.to_csv(path, index=False)
    return path


def write_all(folder: Path, tables: Frames) -> dict[str, Source]:
    """Every table as csv."""
    return {
        name: Source(name, write_csv(table, folder / f"{name}.csv"))
        for name, table in tables.items()
    }


def read_frames(folder: Path, tables: Frames, wanted: Wanted = WANTED) -> Tables:
    return read_inputs(write_all(folder, tables), wanted)


def refused(folder: Path, spoil: Callable[[Frames], None]) -> list[Finding]:
    """The findings that stop the tables once ``spoil`` has changed them."""
    tables = frames()
    spoil(tables)
    with pytest.raises(InputProblem) as caught:
        read_frames(folder, tables)
    return list(caught.value.findings)
