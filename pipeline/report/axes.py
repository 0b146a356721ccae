"""Axes on a sheet: from data to points, with ticks, labels and what lies outside cut off."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from pipeline.core.prices import Floats
from pipeline.report.numerals import show
from pipeline.report.scene import DOTS, SIZE, SMALL, Area, Line, Marks, Point, Scene, Stems, Words
from pipeline.report.scene import measured as width_of

Span = tuple[float, float]
STEPS = (1.0, 2.0, 2.5, 5.0, 10.0)
TICKS = 7
MARGIN = 0.05
TICK = 3.5
HATCH = 5.0


@dataclass(frozen=True, slots=True)
class Axes:
    """A part of a sheet with its own scales.

    Attributes:
        scene: the sheet.
        left, top, right, bottom: the part, in points from the sheet's top left corner.
        x, y: (low, high) of the data along each side.
    """

    scene: Scene
    left: float
    top: float
    right: float
    bottom: float
    x: Span
    y: Span

    def at(self, x: float, y: float) -> Point:
        """Where data stand on the sheet."""
        across = (x - self.x[0]) / (self.x[1] - self.x[0])
        up = (y - self.y[0]) / (self.y[1] - self.y[0])
        return (
            self.left + across * (self.right - self.left),
            self.bottom - up * (self.bottom - self.top),
        )

    def line(self, x: ArrayLike, y: ArrayLike, tone: str, width: float = 1.0,
             dash: tuple[float, ...] = ()) -> None:  # fmt: skip
        """A line through the data, broken at gaps and cut at the axes' ends."""
        for run in _runs(_pairs(x, y), self.x, self.y):
            self.scene.add(Line(tuple(self.at(*p) for p in run), tone, width, dash))

    def across(self, value: float, tone: str = "faint", width: float = 0.8,
               dash: tuple[float, ...] = ()) -> None:  # fmt: skip
        """A horizontal line over the whole width."""
        self.line(self.x, (value, value), tone, width, dash)

    def upright(self, value: float, tone: str = "faint", width: float = 0.8,
                dash: tuple[float, ...] = ()) -> None:  # fmt: skip
        """A vertical line over the whole height."""
        self.line((value, value), self.y, tone, width, dash)

    def band(self, x: ArrayLike, low: ArrayLike, high: ArrayLike, tone: str,
             opacity: float = 1.0) -> None:  # fmt: skip
        """What lies between two lines, where both are known."""
        there, floor = _pairs(x, low), _pairs(x, high)
        known = np.isfinite(there).all(axis=1) & np.isfinite(floor).all(axis=1)
        edge = [*there[known].tolist(), *floor[known][::-1].tolist()]
        if edge:
            points = tuple(self.at(*self.inside(*point)) for point in edge)
            self.scene.add(Area(points, tone, opacity))

    def bar(self, x: Span, y: Span, tone: str, opacity: float = 1.0, *,
            hatched: bool = False, outline: bool = False) -> None:  # fmt: skip
        """A box over the data ranges; ``hatched`` adds slanted lines to its tone."""
        corners = [(x[0], y[0]), (x[1], y[0]), (x[1], y[1]), (x[0], y[1])]
        points = tuple(self.at(*self.inside(*corner)) for corner in corners)
        self.scene.add(Area(points, tone, opacity))
        if outline:
            self.scene.add(Line((*points, points[0]), "paper", 0.6))
        if hatched:
            self.scene.add(*(Line(ends, tone, 0.6) for ends in _hatch(points)))

    def dots(self, x: ArrayLike, y: ArrayLike, tone: str, shape: str = "circle",
             size: float = 5.0, *, filled: bool = True) -> None:  # fmt: skip
        """Marks at the data that are inside."""
        pairs = _pairs(x, y)
        known = np.isfinite(pairs).all(axis=1)
        for at, (low, high) in enumerate((self.x, self.y)):
            known &= (pairs[:, at] >= low - 1e-12) & (pairs[:, at] <= high + 1e-12)
        if known.any():
            points = tuple(self.at(*point) for point in pairs[known].tolist())
            self.scene.add(Marks(points, shape, size, tone, filled))

    def stems(self, x: Floats, y: Floats) -> None:
        """A thin line from zero, which is inside, to each of the data."""
        pairs = zip(x.tolist(), y.tolist(), strict=True)
        ends = (
            (self.at(place, 0.0), self.at(*self.inside(place, value)))
            for place, value in pairs
            if math.isfinite(place + value)
        )
        self.scene.add(Stems(tuple(ends), "faint"))

    def inside(self, x: float, y: float) -> Point:
        """The nearest data inside the axes."""
        return (min(max(x, self.x[0]), self.x[1]), min(max(y, self.y[0]), self.y[1]))


def axes(scene: Scene, x: Span, y: Span, x_words: str = "", y_words: str = "", *,
         top: float = 8.0, bottom: float = 0.0, left: float = 0.0, right: float = 10.0,
         marked: tuple[bool, bool] = (True, True), whole: bool = False) -> Axes:  # fmt: skip
    """Axes with ticks and words, as large as the sheet lets them be.

    Args:
        scene: the sheet; ``top`` and ``bottom`` are where the room for the axes begins and ends
            (0: the sheet's lower end).
        x, y: what of the data is shown.
        x_words, y_words: what stands along each side, on several lines if it has breaks.
        left: the least that the left side takes, more if its ticks and words need it.
        right: left free at the right side.
        marked: whether the lower and the left side have ticks.
        whole: the left side counts something, so that only whole numbers are marked.
    """
    y_ticks = ticks(y) if marked[1] else ()
    y_ticks = tuple(value for value in y_ticks if not whole or float(value).is_integer())
    y_lines = y_words.count("\n") + 1 if y_words else 0
    widest = max((width_of(text, SIZE) for _, text in labels(y_ticks)), default=0.0)
    edge = max(left, 8 + 13.0 * y_lines + widest + TICK)
    x_lines = x_words.count("\n") + 1 if x_words else 0
    floor = (bottom or scene.height) - 4 - 13.0 * x_lines - (17 if marked[0] else 4)
    made = Axes(scene, edge, top, scene.width - right, floor, x, y)
    _sides(made, marked, y_ticks)
    if x_words:
        middle = (made.left + made.right) / 2
        scene.block((middle, floor + (17 if marked[0] else 4) + 10), x_words, anchor="middle")
    for number, line in enumerate(y_words.split("\n") if y_words else ()):
        away = widest + TICK + 8 + 13.0 * (y_lines - 1 - number)
        place = (made.left - away, (made.top + made.bottom) / 2)
        scene.add(Words(place, line, anchor="middle", turned=True))
    return made


def _sides(made: Axes, marked: tuple[bool, bool], y_ticks: Sequence[float]) -> None:
    corner, far = (made.left, made.bottom), (made.right, made.bottom)
    made.scene.add(Line((corner, far), "faint", 0.8))
    if marked[0]:
        x_ticks = ticks(made.x, max(3, int((made.right - made.left) / 62)))
        for value, text in labels(x_ticks):
            x, y = made.at(value, made.y[0])
            made.scene.add(Line(((x, y), (x, y + TICK)), "faint", 0.8))
            made.scene.add(Words((x, y + TICK + 10), text, anchor="middle"))
    if marked[1]:
        made.scene.add(Line((corner, (made.left, made.top)), "faint", 0.8))
        for value, text in labels(y_ticks):
            x, y = made.at(made.x[0], value)
            made.scene.add(Line(((x - TICK, y), (x, y)), "faint", 0.8))
            made.scene.add(Words((x - TICK - 3, y + 0.35 * SIZE), text, anchor="end"))


def rows(scene: Scene, x: Span, names: Sequence[str], x_words: str, *, size: float = SMALL,
         top: float = 8.0) -> Axes:  # fmt: skip
    """Axes with one named row a line of ``names``, the first at the top, at heights 0, −1, ..."""
    edge = 10 + max((width_of(name, size) for name in names), default=0.0) + 8
    span = (-len(names) + 0.4, 0.6)
    made = axes(scene, x, span, x_words, top=top, left=edge, marked=(True, False))
    for at, name in enumerate(names):
        place = (edge - 9, made.at(x[0], -at)[1])
        scene.block(place, name, size=size, anchor="end", middle=True)
    return made


def ticks(span: Span, most: int = TICKS) -> tuple[float, ...]:
    """At most ``most`` round values inside ``span``."""
    low, high = span
    rough = (high - low) / most
    if not math.isfinite(rough) or rough <= 0:
        return ()
    power = 10.0 ** math.floor(math.log10(rough))
    for step in (power * factor for factor in STEPS):
        first, last = math.ceil(low / step - 1e-9), math.floor(high / step + 1e-9)
        if last - first + 1 <= most:
            return tuple(step * number for number in range(first, last + 1))
    return ()


def labels(values: Sequence[float]) -> list[tuple[float, str]]:
    """Ticks with their numbers: thousands separated, true minus signs, as few decimals as tell."""
    decimals = 0
    while decimals < 6 and any(abs(v - round(v, decimals)) > 1e-9 * (1 + abs(v)) for v in values):
        decimals += 1
    return [(value, show(value, decimals)) for value in values]


def reach(*values: Iterable[float], zero: bool = False, margin: float = MARGIN) -> Span:
    """A span that holds all finite values with some room; from −1 to 1 around where none differ."""
    every = np.concatenate([np.asarray(list(part), dtype=np.float64) for part in values])
    found = every[np.isfinite(every)]
    if zero:
        found = np.append(found, 0.0)
    if not len(found):
        return (0.0, 1.0)
    low, high = float(found.min()), float(found.max())
    room = margin * (high - low) or 0.05 * abs(high) or 1.0
    return (low - room, high + room)


def legend(scene: Scene, at: Point, entries: Sequence[tuple[str, Line | Marks]], *,
           size: float = 8.5) -> None:  # fmt: skip
    """Names beside samples of their lines or marks, below one another."""
    x, y = at
    for number, (text, sample) in enumerate(entries):
        level = y + number * (size + 4.5)
        middle = level - 0.35 * size
        if isinstance(sample, Line):
            ends = ((x, middle), (x + 24, middle))
            scene.add(Line(ends, sample.tone, sample.width, sample.dash))
        else:
            point = ((x + 12, middle),)
            scene.add(Marks(point, sample.shape, sample.size, sample.tone, sample.filled))
        scene.add(Words((x + 30, level), text, size=size))


def zero_lines(made: Axes, *, x: bool = False, y: bool = True) -> None:
    """Thin lines at zero, where it is inside."""
    if y and made.y[0] < 0 < made.y[1]:
        made.across(0.0)
    if x and made.x[0] < 0 < made.x[1]:
        made.upright(0.0, dash=DOTS)


def _pairs(x: ArrayLike, y: ArrayLike) -> Floats:
    first, second = np.broadcast_arrays(
        np.asarray(x, dtype=np.float64), np.asarray(y, dtype=np.float64)
    )
    return np.column_stack([first.ravel(), second.ravel()])


def _runs(points: Floats, x: Span, y: Span) -> list[list[Point]]:
    """The connected pieces of a line that are inside."""
    found: list[list[Point]] = []
    for a, b in zip(points[:-1].tolist(), points[1:].tolist(), strict=True):
        cut = _cut((a[0], a[1]), (b[0], b[1]), x, y)
        if cut is None:
            continue
        if found and found[-1][-1] == cut[0]:
            found[-1].append(cut[1])
        else:
            found.append([cut[0], cut[1]])
    return found


def _cut(a: Point, b: Point, x: Span, y: Span) -> tuple[Point, Point] | None:
    """The part of a segment inside a box (Liang and Barsky 1984), None if there is none."""
    if not all(map(math.isfinite, (*a, *b))):
        return None
    start, end = 0.0, 1.0
    move = (b[0] - a[0], b[1] - a[1])
    for side, (low, high) in enumerate((x, y)):
        for step, room in ((-move[side], a[side] - low), (move[side], high - a[side])):
            if step == 0:
                if room < -1e-9 * (abs(high - low) or 1.0):
                    return None
                continue
            share = room / step
            if step < 0:
                start = max(start, share)
            else:
                end = min(end, share)
    if start > end:
        return None
    first = a if start == 0 else (a[0] + start * move[0], a[1] + start * move[1])
    last = b if end == 1 else (a[0] + end * move[0], a[1] + end * move[1])
    return first, last


def _hatch(box: tuple[Point, ...]) -> list[tuple[Point, Point]]:
    """Slanted lines that fill a box of four corners."""
    left, right = min(p[0] for p in box), max(p[0] for p in box)
    top, bottom = min(p[1] for p in box), max(p[1] for p in box)
    found = []
    shift = math.ceil((left + top) / HATCH) * HATCH
    while shift < right + bottom:
        cut = _cut((shift - bottom, bottom), (shift - top, top), (left, right), (top, bottom))
        if cut is not None and cut[0] != cut[1]:
            found.append(cut)
        shift += HATCH
    return found
