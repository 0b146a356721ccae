"""A scene as an SVG document: the same bytes every time, text stays text.

Colours stand as attributes, for every program that shows the file, and as classes, so that a
page's own style may replace them in the dark.
"""

from __future__ import annotations

from functools import lru_cache
from html import escape

from pipeline.report.scene import INK, SIZE, TONES, Area, Line, Marks, Part, Point, Scene, Stems
from pipeline.report.scene import Words as Text

FONT = "DejaVu Sans, Segoe UI, Helvetica Neue, Arial, sans-serif"
HEAD = '<?xml version="1.0" encoding="utf-8"?>\n'


def svg(scene: Scene) -> str:
    """The scene as a document of its own."""
    body = "\n".join(_part(part) for part in scene.parts)
    width, height = _number(scene.width), _number(scene.height)
    return (
        f'{HEAD}<svg xmlns="http://www.w3.org/2000/svg" width="{width}pt" height="{height}pt" '
        f'viewBox="0 0 {width} {height}" font-family="{FONT}" font-size="{_number(SIZE)}" '
        f'fill="{INK}">\n{body}\n</svg>\n'
    )


def _part(part: Part) -> str:
    match part:
        case Line():
            dash = " ".join(map(_number, part.dash))
            dashed = f' stroke-dasharray="{dash}"' if part.dash else ""
            return (
                f'<path d="{_way(part.points)}" fill="none" {_stroke(part.tone)} '
                f'stroke-width="{_number(part.width)}"{dashed}/>'
            )
        case Stems():
            way = "".join(map(_way, part.ends))
            width = _number(part.width)
            return f'<path d="{way}" fill="none" {_stroke(part.tone)} stroke-width="{width}"/>'
        case Area():
            faded = f' fill-opacity="{_number(part.opacity)}"' if part.opacity < 1 else ""
            return f'<path d="{_way(part.points)}Z" {_fill(part.tone)}{faded}/>'
        case Marks():
            inside = part.tone if part.filled else "paper"
            way = "".join(_mark(part.shape, part.size, point) for point in part.points)
            names = f'class="f-{inside} s-{part.tone}"'
            colours = f'fill="{TONES[inside]}" stroke="{TONES[part.tone]}"'
            return f'<path d="{way}" {names} {colours} stroke-width="1.2"/>'
        case Text():
            return _text(part)


def _text(part: Text) -> str:
    x, y = (_number(value) for value in part.at)
    more = "" if part.size == SIZE else f' font-size="{_number(part.size)}"'
    more += "" if part.anchor == "start" else f' text-anchor="{part.anchor}"'
    more += ' font-weight="bold"' if part.bold else ""
    more += f' transform="rotate(-90 {x} {y})"' if part.turned else ""
    return f'<text x="{x}" y="{y}" {_fill(part.tone)}{more}>{escape(part.text)}</text>'


def _fill(tone: str) -> str:
    return f'class="f-{tone}" fill="{TONES[tone]}"'


def _stroke(tone: str) -> str:
    return f'class="s-{tone}" stroke="{TONES[tone]}"'


def _way(points: tuple[Point, ...]) -> str:
    return "M" + "L".join(f"{_number(x)} {_number(y)}" for x, y in points)


def corners(shape: str, size: float, at: Point) -> tuple[Point, ...]:
    """The corners of a mark; none for a circle."""
    x, y, r = *at, size / 2
    return {
        "square": ((x - r, y - r), (x + r, y - r), (x + r, y + r), (x - r, y + r)),
        "triangle": ((x, y - r), (x + r, y + r), (x - r, y + r)),
        "diamond": ((x, y - 1.2 * r), (x + 1.2 * r, y), (x, y + 1.2 * r), (x - 1.2 * r, y)),
        "left": ((x - r, y), (x + r, y - r), (x + r, y + r)),
        "right": ((x + r, y), (x - r, y - r), (x - r, y + r)),
        "tick": ((x, y - r), (x, y + r)),
        "circle": (),
    }[shape]


def _mark(shape: str, size: float, at: Point) -> str:
    if shape == "circle":
        r, d = _number(size / 2), _number(size)
        begin = f"M{_number(at[0] - size / 2)} {_number(at[1])}"
        return f"{begin}a{r} {r} 0 1 0 {d} 0a{r} {r} 0 1 0 -{d} 0Z"
    return _way(corners(shape, size, at)) + "Z"


@lru_cache(maxsize=2**14)
def _number(value: float) -> str:
    """At most two decimals, no exponent, no minus zero."""
    text = f"{value:.2f}".rstrip("0").rstrip(".")
    return "0" if text in ("-0", "") else text


def titled(scene: Scene, lines: list[str]) -> Scene:
    """The scene under its takeaway."""
    step, above = 15.0, 10 + 15.0 * len(lines)
    whole = Scene(scene.width, scene.height + above)
    for at, line in enumerate(lines):
        whole.add(Text((10, 6 + step * (at + 1)), line, size=11, bold=True))
    whole.add(*(_moved(part, above) for part in scene.parts))
    return whole


def _moved(part: Part, down: float) -> Part:
    match part:
        case Line():
            return Line(_shifted(part.points, down), part.tone, part.width, part.dash)
        case Stems():
            ends = tuple((_shifted(pair, down)[0], _shifted(pair, down)[1]) for pair in part.ends)
            return Stems(ends, part.tone, part.width)
        case Area():
            return Area(_shifted(part.points, down), part.tone, part.opacity)
        case Marks():
            points = _shifted(part.points, down)
            return Marks(points, part.shape, part.size, part.tone, part.filled)
        case Text():
            at = (part.at[0], part.at[1] + down)
            return Text(at, part.text, part.tone, part.size, part.anchor, part.turned, part.bold)


def _shifted(points: tuple[Point, ...], down: float) -> tuple[Point, ...]:
    return tuple((x, y + down) for x, y in points)
