"""How a house wants its papers: what the documents may know of the house's style."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

INTERVAL, T_VALUE, STANDARD_ERROR = "interval", "t value", "standard error"
BRACKETS: Final = (INTERVAL, T_VALUE, STANDARD_ERROR)
ISO, ENGLISH, AMERICAN, GERMAN, FRENCH = "iso", "english", "american", "german", "french"
DATES: Final = (ISO, ENGLISH, AMERICAN, GERMAN, FRENCH)
PAGES: Final = ("A4", "Letter")
PNG, JPEG, SVG = "png", "jpeg", "svg"
AMOUNT: Final = "{}"


@dataclass(frozen=True, slots=True)
class Logo:
    """The house's sign: the bytes of its file, which of png, jpeg and svg it is, and its size.

    ``shape`` is its width over its height; ``words`` what a reader who cannot see it is told.
    """

    data: bytes
    kind: str
    shape: float
    words: str


@dataclass(frozen=True, slots=True)
class Reviewer:
    """Who signs, and as what."""

    name: str
    role: str


@dataclass(frozen=True, slots=True)
class House:
    """The style of the papers.

    Attributes:
        stars: whether p-values under 10%, 5% and 1% are marked.
        brackets: what stands in brackets under a coefficient, one of :data:`BRACKETS`.
        decimals: most decimals of amounts of the outcome; None leaves them to its unit.
        money: how amounts of money are shown, the amount where ``{}`` stands; '' shows the
            currency as the study names it.
        dates: how dates are shown, one of :data:`DATES`.
        footer: words at the foot of every page and sheet.
        page: size of the paper, one of :data:`PAGES`.
        logo, reviewers: the house's sign, and who signs.
    """

    stars: bool = False
    brackets: str = INTERVAL
    decimals: int | None = None
    money: str = ""
    dates: str = ISO
    footer: str = ""
    page: str = PAGES[0]
    logo: Logo | None = None
    reviewers: tuple[Reviewer, ...] = ()


PLAIN: Final = House()


def money_words(currency: str, pattern: str = "") -> tuple[str, str]:
    """What stands before and after an amount of money, spaces included.

    Args:
        currency: the currency with its scale, such as ``USD million``.
        pattern: the house's own way, such as ``US$ {} m``; '' for the currency's.
    """
    if pattern:
        before, _, after = pattern.partition(AMOUNT)
        return before, after
    code, _, scale = currency.partition(" ")
    return f"{code} " if code else "", f" {scale}" if scale else ""


def money_heading(currency: str, pattern: str = "") -> str:
    """The unit of a column of money: ``USD million``, or the pattern without its amount."""
    if not pattern:
        return currency
    return " ".join(part.strip() for part in pattern.split(AMOUNT) if part.strip())
