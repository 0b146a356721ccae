"""A picture as plain shapes, free of any format: what stands where, in points.

Every tone has a name, so that a page may give it another colour in the dark; shapes and dashes
differ besides, so that a picture reads in grey.
"""

from __future__ import annotations

import textwrap
from dataclasses import dataclass, field

from pipeline.report.numerals import clean

Point = tuple[float, float]

TONES = {
    "one": "#0072b2",
    "two": "#d55e00",
    "three": "#333333",
    "four": "#009e73",
    "ink": "#222222",
    "faint": "#8a8a8a",
    "strip": "#ececec",
    "paper": "#fffefb",
}
"""Blue and vermilion of the Okabe-Ito palette lead: apart for every kind of colour vision, and of
different lightness."""
SERIES = ("one", "two", "three", "four")
COLOURS = tuple(TONES[name] for name in SERIES)
LINES: tuple[tuple[float, ...], ...] = ((), (9, 3.5), (3, 2.5), (9, 3, 2, 3))
MARKERS = ("circle", "square", "triangle", "diamond")
DOTS, DASHES = (1.2, 2.4), (5.0, 3.0)
INK = TONES["ink"]
SIZE, SMALL = 9.5, 8.0
WIDTH = 518.4
LEADING = 1.22

_NARROW, _WIDE = frozenset("iIljt.,:;'|!()[]f’‘ r-"), frozenset("mwMW%@—")


@dataclass(frozen=True, slots=True)
class Line:
    """A line through points; an empty ``dash`` is a solid one."""

    points: tuple[Point, ...]
    tone: str
    width: float = 1.0
    dash: tuple[float, ...] = ()


@dataclass(frozen=True, slots=True)
class Stems:
    """Many separate lines of two points each, all alike."""

    ends: tuple[tuple[Point, Point], ...]
    tone: str
    width: float = 1.0


@dataclass(frozen=True, slots=True)
class Area:
    """A filled polygon without an outline."""

    points: tuple[Point, ...]
    tone: str
    opacity: float = 1.0


@dataclass(frozen=True, slots=True)
class Marks:
    """The same mark at many points; hollow ones are filled with paper."""

    points: tuple[Point, ...]
    shape: str
    size: float
    tone: str
    filled: bool = True


@dataclass(frozen=True, slots=True)
class Words:
    """Text on one line; ``anchor`` is start, middle or end; ``turned`` runs it upwards."""

    at: Point
    text: str
    tone: str = "ink"
    size: float = SIZE
    anchor: str = "start"
    turned: bool = False
    bold: bool = False


Part = Line | Stems | Area | Marks | Words


@dataclass(slots=True)
class Scene:
    """Parts in the order they are painted, on a sheet of ``width`` by ``height`` points."""

    width: float
    height: float
    parts: list[Part] = field(default_factory=list)

    def add(self, *parts: Part) -> None:
        """Paint these over what is there."""
        self.parts.extend(parts)

    def block(self, at: Point, text: str, *, tone: str = "ink", size: float = SIZE,
              anchor: str = "start", middle: bool = False) -> None:  # fmt: skip
        """Lines of text below one another, the first at ``at``, or centred on it."""
        lines = text.split("\n")
        x, y = at
        y -= (len(lines) - 1) * size * LEADING / 2 - 0.35 * size if middle else 0.0
        for number, line in enumerate(lines):
            place = (x, y + number * size * LEADING)
            self.add(Words(place, line, tone, size, anchor))


def measured(text: str, size: float = SIZE) -> float:
    """About how wide the widest line of ``text`` is, in points."""

    def width(character: str) -> float:
        if character in _NARROW:
            return 0.36
        return 0.92 if character in _WIDE else 0.7 if character.isupper() else 0.6

    return size * max((sum(map(width, line)) for line in text.split("\n")), default=0.0)


def wrapped(text: str, width: int, lines: int) -> str:
    """``text`` on at most ``lines`` lines, an ellipsis where it was cut."""
    return "\n".join(textwrap.wrap(clean(text), width, max_lines=lines, placeholder=" …"))
