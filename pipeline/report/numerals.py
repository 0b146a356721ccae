"""How numbers are printed: the only place that turns one into text.

Basis points carry no more digits than a tenth of the standard error: two significant digits of
the standard error decide, and at most one decimal is shown unless the error is below a tenth of
a basis point. Nothing is printed in scientific notation.
"""

from __future__ import annotations

import math
import re
from functools import lru_cache

from pipeline.core.outcome import Unit
from pipeline.report.days import day_words
from pipeline.report.document import Bracketed, Cell, Day, Interval, Number, Statistic, Text

BP = 10_000.0
PERCENT = 100.0
MINUS = "\N{MINUS SIGN}"
LEAST_P = 0.001
# Decimals of an interval's end that lies near zero.
MOST_DIGITS = 4

# Controls, lone surrogates, non-characters and marks that reorder text: no page needs them, XML
# refuses most of them, and the last kind can make a cell read as something else.
_UNPRINTABLE = re.compile(
    "[\x00-\x08\x0b\x0c\x0e-\x1f\x7f-\x9f\u202a-\u202e\u2066-\u2069\ud800-\udfff\ufffe\uffff]"
)
_HYPHEN_NUMBER = re.compile(r"(?<![\w)\]])-(?=\d)")


def clean(text: str) -> str:
    """``text`` without characters that a page, a sheet or XML cannot hold."""
    return _UNPRINTABLE.sub("", text)


@lru_cache(maxsize=2**10)
def slug(text: str, joint: str = "_") -> str:
    """``text`` as a name of files and anchors: small letters, digits and ``joint``."""
    return re.sub(r"[^a-z0-9]+", joint, text.lower()).strip(joint) or "part"


def broken(word: str, longest: int, piece: int = 14) -> list[str]:
    """A word of more than ``longest`` characters in pieces that a narrow column can hold."""
    if len(word) <= longest:
        return [word]
    return [word[at : at + piece] for at in range(0, len(word), piece)]


@lru_cache(maxsize=2**14)
def true_minus(text: str) -> str:
    """``text`` with the hyphen before a number replaced by a minus sign, as in [−1, +1]."""
    return _HYPHEN_NUMBER.sub(MINUS, text)


def show(value: float, digits: int = 0, *, least: float = 0.0, signed: bool = False) -> str:
    """A number with ``digits`` decimals, thousands separated, a true minus sign.

    A non-negative value under ``least`` gives "<least". NaN gives an empty string; an infinite
    value gives the word.
    """
    if math.isnan(value):
        return ""
    if math.isinf(value):
        return "infinite" if value > 0 else f"{MINUS}infinite"
    if 0 <= value < least:
        return f"<{least:.{digits}f}"
    text = f"{abs(value):,.{digits}f}"
    if not text.strip("0.,"):
        return text
    if value < 0:
        return f"{MINUS}{text}"
    return f"+{text}" if signed else text


def digits_for(error: float, most: int) -> int:
    """Decimals that keep two significant digits of ``error``, between 0 and ``most``."""
    if not math.isfinite(error) or error <= 0:
        return 0
    return min(max(0, 1 - math.floor(math.log10(error))), most)


def bp_digits(error: float, most: int = 1) -> int:
    """Decimals of a value in basis points whose standard error, in basis points, is ``error``.

    At most ``most``, unless the error is smaller than they show.
    """
    return digits_for(error, most if not error < 10.0**-most else 6)


def unit_digits(error: float, unit: Unit) -> int:
    """Decimals of an amount printed in ``unit`` whose standard error, as stored, is ``error``."""
    return bp_digits(error * unit.scale, unit.decimals)


def plain_digits(value: float, significant: int = 3) -> int:
    """Decimals that show ``significant`` digits of a number without an error, at most six."""
    if not math.isfinite(value) or value == 0:
        return 0
    return min(max(0, significant - 1 - math.floor(math.log10(abs(value)))), 6)


def bp(value: float, digits: int = 0) -> Number | None:
    """A cell in basis points of a decimal value; blank for NaN."""
    return None if math.isnan(value) else Number(value * BP, digits, "bp")


def in_unit(value: float, unit: Unit, digits: int = 0) -> Number | None:
    """A cell in the outcome's unit of an amount as stored; blank for NaN."""
    return None if math.isnan(value) else Number(value * unit.scale, digits, unit.short)


def amount(value: float, unit: Unit, digits: int | None = None) -> str:
    """An amount as stored, in words: ``35.2%``; three significant digits unless told."""
    printed = value * unit.scale
    text = show(printed, plain_digits(printed) if digits is None else digits)
    return f"{unit.before}{text}{unit.level}"


def percent(value: float, digits: int = 0) -> Number | None:
    """A cell in percent of a fraction; blank for NaN."""
    return None if math.isnan(value) else Number(value * PERCENT, digits, "%")


def p_value(value: float) -> Number | None:
    """A cell with a p-value, as 0.012 or <0.001; blank for NaN."""
    return None if math.isnan(value) else Number(value, 3, "", LEAST_P)


def plain(value: float, digits: int | None = None, unit: str = "") -> Number | None:
    """A cell with a number; three significant digits unless told. Blank for NaN."""
    if math.isnan(value):
        return None
    return Number(value, plain_digits(value) if digits is None else digits, unit)


def count(value: int, unit: str = "deals") -> Number:
    """A cell with a count."""
    return Number(float(value), 0, unit)


def shown(number: Number | None) -> str:
    """A number cell as printed."""
    if number is None:
        return ""
    return show(number.value, number.digits, least=number.least) + number.mark


def phrase_p(text: str) -> str:
    """``p = 0.012`` or ``p < 0.001`` of a printed p-value."""
    return f"p < {text[1:]}" if text.startswith("<") else f"p = {text}"


def lines(cell: Cell) -> tuple[str, ...]:
    """The lines of a cell as a page prints them; none for a blank cell."""
    match cell:
        case None:
            return ()
        case Text(text):
            return (true_minus(clean(text)),) if text else ()
        case Number():
            return (shown(cell),)
        case Interval():
            ends = clean(cell.words) or f"[{_end(cell.low)}, {_end(cell.high)}]"
            empty = not cell.words and cell.low is None
            return _filled(shown(cell.estimate), "" if empty else ends)
        case Bracketed(estimate, inside):
            below = f"({shown(inside)})" if inside else ""
            return _filled(shown(estimate), below)
        case Day(day, dates):
            return (day_words(day, dates),)
        case Statistic():
            adjusted = f"Holm {phrase_p(shown(cell.adjusted))}" if cell.adjusted else ""
            p = phrase_p(shown(cell.p)) if cell.p else ""
            return _filled(shown(cell.value), p, adjusted)


def _end(number: Number | None) -> str:
    """An interval's end as printed: never as zero unless it is, so that its side is seen."""
    text = shown(number)
    if number is None or not number.value or not math.isfinite(number.value):
        return text
    if any(mark in "123456789" for mark in text):
        return text
    digits = -math.floor(math.log10(abs(number.value)))
    return show(number.value, digits) + number.mark if digits <= MOST_DIGITS else text


def _filled(*found: str) -> tuple[str, ...]:
    return tuple(line for line in found if line)
