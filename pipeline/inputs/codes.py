"""Check digits of securities' identifiers."""

from __future__ import annotations

import re
from collections.abc import Callable

SEDOL_WEIGHTS = (1, 3, 1, 7, 3, 9)
VOWELS = set("AEIOU")


def is_isin(code: str) -> bool:
    """Whether the check digit of a twelve-character code fits (ISO 6166, annex on the digit).

    Letters become two digits (A is 10), and the digits pass the Luhn test from the right.
    """
    if not re.fullmatch(r"[A-Z]{2}[A-Z0-9]{9}[0-9]", code):
        return False
    digits = [int(digit) for sign in code for digit in str(int(sign, 36))]
    doubled = [d if at % 2 == 0 else sum(divmod(2 * d, 10)) for at, d in enumerate(digits[::-1])]
    return sum(doubled) % 10 == 0


def is_cusip(code: str) -> bool:
    """Whether the check digit of a nine-character code fits (ANSI X9.6).

    The first eight signs have the values 0 to 9, A to Z from 10, and * @ # from 36; every second
    one is doubled, and the digits of all are summed.
    """
    if not re.fullmatch(r"[0-9A-Z*@#]{8}[0-9]", code):
        return False
    signs = "0123456789ABCDEFGHIJKLMNOPQRSTUVWXYZ*@#"
    values = [signs.index(sign) * (1 + at % 2) for at, sign in enumerate(code[:8])]
    total = sum(sum(divmod(value, 10)) for value in values)
    return (10 - total % 10) % 10 == int(code[8])


def is_sedol(code: str) -> bool:
    """Whether the check digit of a seven-character code fits (London Stock Exchange).

    Weights 1, 3, 1, 7, 3, 9 on the first six signs, A being 10; no vowels.
    """
    if not re.fullmatch(r"[0-9A-Z]{6}[0-9]", code) or VOWELS & set(code):
        return False
    total = sum(w * int(sign, 36) for w, sign in zip(SEDOL_WEIGHTS, code, strict=False))
    return (10 - total % 10) % 10 == int(code[6])


CHECKS: dict[str, Callable[[str], bool]] = {"isin": is_isin, "cusip": is_cusip, "sedol": is_sedol}
