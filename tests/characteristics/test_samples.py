"""Parts of the sample by a condition, and codes of what deals have in common."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from pipeline.characteristics.samples import grouped_by, meeting
from pipeline.core.findings import InputProblem

DEALS = pd.DataFrame(
    {
        "country": ["north", "south", "south", None],
        "value": [5.0, 10.0, 20.0, np.nan],
        "day_zero": pd.to_datetime(["2020-01-02", "2020-01-02", "2020-03-04", "2020-03-05"]),
        "same": [1, 1, 1, 1],
    }
)


def kept(column: str, *condition: object, leave_out: bool = False) -> list[bool]:
    found = meeting(DEALS, column, *condition, leave_out=leave_out, name="part")  # type: ignore[arg-type]
    return found.tolist()


def test_words_numbers_and_spans() -> None:
    assert kept("country", "south", None, None) == [False, True, True, False]
    assert kept("value", 10, None, None) == [False, True, False, False]
    assert kept("value", None, 5.0, None) == [False, True, True, False]
    assert kept("value", None, 5.0, 20.0) == [False, True, False, False]


def test_a_gap_meets_no_condition_and_its_opposite_neither() -> None:
    assert kept("country", "south", None, None, leave_out=True) == [True, False, False, False]
    assert kept("value", None, 5.0, None, leave_out=True) == [True, False, False, False]


@pytest.mark.parametrize(
    ("column", "condition", "rule"),
    [
        ("unknown", (1, None, None), "unknown_variable"),
        ("country", ("east", None, None), "grid_sample"),
        ("same", (1, None, None), "grid_sample"),
    ],
)
def test_a_sample_that_is_none_names_its_key(
    column: str, condition: tuple[object, ...], rule: str
) -> None:
    with pytest.raises(InputProblem) as caught:
        kept(column, *condition)
    (finding,) = caught.value.findings
    assert (finding.rule, finding.column) == (rule, "scrutiny.grid.samples.part")


def test_groups_are_coded_and_spelled() -> None:
    codes, spelled = grouped_by(DEALS, ["day_zero", "country", "same", "unknown"])
    assert codes["day_zero"].tolist() == [0, 0, 1, 2]
    assert spelled["day_zero"] == ("2020-01-02", "2020-03-04", "2020-03-05")
    assert set(codes) == {"day_zero"}
