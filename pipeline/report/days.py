"""Dates as the house shows them: the only place that turns one into words."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from datetime import date
from typing import Final

from pipeline.core.house import AMERICAN, ENGLISH, FRENCH, GERMAN, ISO

# Names and order of day, month and year as in the Unicode Common Locale Data Repository (long
# dates of en-GB, en-US, de and fr); the ordinal of a French first is that of French usage.
MONTHS: Final[Mapping[str, tuple[str, ...]]] = {
    ENGLISH: ("January", "February", "March", "April", "May", "June", "July", "August",
              "September", "October", "November", "December"),
    GERMAN: ("Januar", "Februar", "März", "April", "Mai", "Juni", "Juli", "August", "September",
             "Oktober", "November", "Dezember"),
    FRENCH: ("janvier", "février", "mars", "avril", "mai", "juin", "juillet", "août", "septembre",
             "octobre", "novembre", "décembre"),
}  # fmt: skip
_WRITTEN: Mapping[str, Callable[[date], str]] = {
    ISO: lambda day: day.isoformat(),
    ENGLISH: lambda day: f"{day.day} {MONTHS[ENGLISH][day.month - 1]} {day.year}",
    AMERICAN: lambda day: f"{MONTHS[ENGLISH][day.month - 1]} {day.day}, {day.year}",
    GERMAN: lambda day: f"{day.day}. {MONTHS[GERMAN][day.month - 1]} {day.year}",
    FRENCH: lambda day: (
        f"{day.day}{'er' if day.day == 1 else ''} {MONTHS[FRENCH][day.month - 1]} {day.year}"
    ),
}
_ISO_DAY = re.compile(r"(?<![\w/.-])(\d{4})-(\d\d)-(\d\d)(?![\w-]|\.\w)")


def day_words(day: date, dates: str) -> str:
    """``day`` in the house's way, such as ``8 March 2024``."""
    return _WRITTEN[dates](day)


def day_of(text: str) -> date | None:
    """The date that ``text`` is, written as 2024-03-08; None if it is no such date."""
    found = _ISO_DAY.fullmatch(text)
    return _day(found) if found else None


def redated(text: str, dates: str) -> str:
    """``text`` with every date in it, written as 2024-03-08, shown in the house's way."""
    if dates == ISO:
        return text

    def worded(found: re.Match[str]) -> str:
        day = _day(found)
        return day_words(day, dates) if day else found.group()

    return _ISO_DAY.sub(worded, text)


def _day(found: re.Match[str]) -> date | None:
    try:
        return date(*(int(part) for part in found.groups()))
    except ValueError:
        return None
