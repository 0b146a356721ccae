"""Words for keys and numbers of the diagnostics."""

from __future__ import annotations

import pandas as pd
import pytest

from pipeline.report.document import Number
from pipeline.report.doubts import _checked
from pipeline.report.numerals import shown
from pipeline.report.wording import spoken


@pytest.mark.parametrize(
    ("key", "words"),
    [
        ("stock_yogo_size_10", "Stock–Yogo critical value, 10% size"),
        ("stock_yogo_liml_size_25", "Stock–Yogo critical value, limited information, 25% size"),
        ("within_r_squared", "Within R²"),
    ],
)
def test_keys_as_words(key: str, words: str) -> None:
    assert spoken(key) == words


def test_a_tiny_p_among_the_diagnostics_is_not_zero() -> None:
    row = pd.Series({"check": "Excluded variables move the decision, p", "value": 1e-12})
    cell = _checked(None, row, "value")  # type: ignore[arg-type]
    assert isinstance(cell, Number)
    assert shown(cell) == "<0.001"
