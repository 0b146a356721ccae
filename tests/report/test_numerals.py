"""How numbers are printed.

Two significant digits of the standard error decide the decimals: the convention for stating a
standard uncertainty in the Guide to the Expression of Uncertainty in Measurement (JCGM 100:2008,
7.2.6), from memory. No stars and no powers of ten: the house's own rule.
"""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from pipeline.core.estimate import ConfidenceSet, Shape
from pipeline.report.document import Interval, Number, Statistic, Text
from pipeline.report.numerals import (
    bp,
    bp_digits,
    clean,
    digits_for,
    lines,
    p_value,
    plain,
    show,
    shown,
    slug,
    true_minus,
)
from pipeline.report.wording import df_words, joined, set_cell, set_words


@pytest.mark.parametrize(
    "value, digits, text",
    [
        (-12.34, 0, "−12"),
        (1234567.0, 0, "1,234,567"),
        (-0.004, 2, "0.00"),
        (-0.04, 0, "0"),
        (0.5, 1, "0.5"),
        (1e-9, 3, "0.000"),
        (-1e12, 0, "−1,000,000,000,000"),
        (math.nan, 0, ""),
        (math.inf, 0, "infinite"),
    ],
)
def test_show(value: float, digits: int, text: str) -> None:
    assert show(value, digits) == text


def test_signs_of_sessions() -> None:
    assert [show(v, signed=True) for v in (-1, 0, 1)] == ["−1", "0", "+1"]


@pytest.mark.parametrize(
    "p, text",
    [(0.0123, "0.012"), (0.00099, "<0.001"), (0.001, "0.001"), (0.0, "<0.001"), (1, "1.000")],
)
def test_p_values(p: float, text: str) -> None:
    assert shown(p_value(p)) == text


@pytest.mark.parametrize(
    "error, digits", [(52.0, 0), (10.0, 0), (9.9, 1), (1.2, 1), (0.3, 1), (0.042, 3), (math.nan, 0)]
)
def test_decimals_of_basis_points(error: float, digits: int) -> None:
    assert bp_digits(error) == digits


@given(st.floats(1e-4, 1e6), st.floats(-1e6, 1e6))
def test_no_digit_is_finer_than_a_tenth_of_the_error(error: float, value: float) -> None:
    digits = digits_for(error, 6)
    assert 10.0**-digits >= error / 100 or digits == 0
    if digits < 6:
        assert 10.0**-digits <= error or error < 1
    text = show(value, digits)
    assert "e" not in text
    assert "-" not in text


def test_three_significant_digits_where_no_error_is_known() -> None:
    assert [shown(plain(v)) for v in (0.0184, 0.2, 23.004, 2999.0)] == [
        "0.0184", "0.200", "23.0", "2,999",
    ]  # fmt: skip


def test_missing_numbers_are_blank() -> None:
    assert bp(math.nan) is None
    assert lines(None) == ()
    assert lines(Text("")) == ()
    assert lines(Interval(None, None, None)) == ()


def test_cells_on_a_page() -> None:
    cell = Interval(Number(-89.3, 0), Number(-227.1, 0), Number(48.2, 0))
    assert lines(cell) == ("−89", "[−227, 48]")
    assert lines(Statistic(Number(-2.5, 2), p_value(0.013), p_value(0.026))) == (
        "−2.50", "p = 0.013", "Holm p = 0.026",
    )  # fmt: skip
    assert lines(Statistic(Number(9, 2), p_value(1e-5))) == ("9.00", "p < 0.001")


@pytest.mark.parametrize(
    "shape, words",
    [
        (Shape.INTERVAL, "from −310 to 120 bp"),
        (Shape.RAYS, "two rays: at or below −310, or at or above 120 bp"),
        (Shape.LINE, "the whole line: no value is excluded"),
        (Shape.EMPTY, "empty: no value fits"),
    ],
)
def test_all_shapes_of_a_set_have_words(shape: Shape, words: str) -> None:
    found = ConfidenceSet(shape, -0.0310, 0.0120, 0.95, "a test")
    assert set_words(found, 0) == words
    cell = set_cell(-0.0089, found, 0)
    expected = ("−89", "[−310, 120]") if shape is Shape.INTERVAL else ("−89", words)
    assert lines(cell) == expected


@pytest.mark.parametrize(
    "text, found",
    [
        ("CAR[-1, +1]", "CAR[−1, +1]"),
        ("sessions -42 to -12", "sessions −42 to −12"),
        ("2015-2024", "2015-2024"),
        ("D-12", "D-12"),
        ("two-step", "two-step"),
    ],
)
def test_only_the_hyphen_of_a_number_becomes_a_minus(text: str, found: str) -> None:
    assert true_minus(text) == found


def test_unprintable_characters_go() -> None:
    assert clean("a\x00b\x1bc\u202ed\ud800e\nf") == "abcde\nf"


def test_names_of_files_hold_letters_digits_and_joints() -> None:
    assert slug("../Mean: a/b\\c =1") == "mean_a_b_c_1"
    assert slug("日本") == "part"


def test_lists_and_degrees_of_freedom_in_words() -> None:
    assert joined(["a", "b", "c"]) == "a, b and c"
    assert joined([]) == ""
    assert df_words(math.inf) == "normal"
    assert df_words(15.5) == "15.5"


@pytest.mark.parametrize(
    ("low", "high", "text"),
    [
        (-58.2, -0.41, "[−58, −0.4]"),
        (0.04, 380.0, "[0.04, 380]"),
        (-3.0, 0.0, "[−3, 0]"),
        (-1e-9, 5.0, "[0, 5]"),
    ],
)
def test_an_end_near_zero_shows_its_side(low: float, high: float, text: str) -> None:
    assert lines(Interval(Number(1.0, 0), Number(low, 0), Number(high, 0)))[-1] == text
