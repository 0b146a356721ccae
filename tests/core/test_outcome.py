"""Units of an outcome, and one deal's place among the others."""

from __future__ import annotations

import numpy as np
import pytest

from pipeline.core.outcome import BASIS_POINTS, UNITS, money_in, standing_of
from pipeline.core.outcome import Outcome as Explained
from pipeline.report.numerals import amount, unit_digits

# One premium of 35% as the cells of each unit hold it, and as a page prints it.
SAME = {
    "percent": (35.0, "35.0%"),
    "decimal": (0.35, "35.0%"),
    "price ratio": (1.35, "35.0%"),
    "basis points": (3500.0, "3,500 bp"),
    "log points": (35.0, "35.0 log points"),
}


@pytest.mark.parametrize("key", SAME)
def test_one_premium_in_every_unit_is_stored_alike(key: str) -> None:
    given, printed = SAME[key]
    stored = UNITS[key].stored(np.array([given]))
    assert stored == pytest.approx([0.35])
    assert amount(float(stored[0]), UNITS[key]) == printed


def test_a_standard_error_has_no_zero_of_its_own() -> None:
    assert UNITS["price ratio"].stored_error(np.array([0.02])) == pytest.approx([0.02])
    assert UNITS["percent"].stored_error(np.array([2.0])) == pytest.approx([0.02])


def test_money_stands_between_currency_and_scale() -> None:
    assert amount(12.5, money_in("EUR million")) == "EUR 12.5 million"
    assert amount(12.5, money_in("EUR")) == "EUR 12.5"


def test_digits_follow_the_printed_error() -> None:
    assert unit_digits(0.0031, UNITS["percent"]) == 2
    assert unit_digits(0.031, UNITS["percent"]) == 1
    assert unit_digits(0.0031, BASIS_POINTS) == 0
    assert unit_digits(0.00031, BASIS_POINTS) == 1


def test_standing_counts_from_the_largest() -> None:
    values = np.array([0.1, 0.4, 0.2])
    found = standing_of(Explained(column="premium"), 0.2, 0.05, values, 0.95)
    assert (found.rank, found.deals) == (2, 3)
    assert (found.low, found.high) == pytest.approx((0.2 - 0.09799820, 0.2 + 0.09799820))
    unknown = standing_of(Explained(column="premium"), 0.2, float("nan"), values, 0.95)
    assert np.isnan([unknown.low, unknown.high]).all()
