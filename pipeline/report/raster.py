"""A scene as a PNG picture, for the formats that hold no vectors."""

from __future__ import annotations

import io
import itertools
from functools import cache

from PIL import Image, ImageDraw, ImageFont

from pipeline.report.fonts import packed
from pipeline.report.scene import TONES, Area, Line, Marks, Point, Scene, Stems, Words
from pipeline.report.vector import corners

FINER = 3
"""Painted this much larger and averaged down, so that edges are smooth."""
ANCHORS = {"start": "ls", "middle": "ms", "end": "rs"}


def png(scene: Scene, dpi: int = 200) -> bytes:
    """The scene on white paper."""
    scale = FINER * dpi / 72
    size = (round(scene.width * scale), round(scene.height * scale))
    picture = Image.new("RGB", size, "white")
    brush = ImageDraw.Draw(picture)
    for part in scene.parts:
        match part:
            case Line():
                _line(brush, part, scale)
            case Stems():
                for ends in part.ends:
                    _line(brush, Line(ends, part.tone, part.width), scale)
            case Area():
                points = _scaled(part.points, scale)
                brush.polygon(points, fill=_faded(part.tone, part.opacity))
            case Marks():
                for point in part.points:
                    _mark(brush, part, point, scale)
            case Words():
                _words(picture, brush, part, scale)
    buffer = io.BytesIO()
    picture.reduce(FINER).quantize(128).save(buffer, "PNG", optimize=False, dpi=(dpi, dpi))
    return buffer.getvalue()


def _scaled(points: tuple[Point, ...], scale: float) -> list[Point]:
    return [(x * scale, y * scale) for x, y in points]


def _colour(tone: str) -> str:
    return "#ffffff" if tone == "paper" else TONES[tone]


def _faded(tone: str, opacity: float) -> tuple[int, int, int]:
    """The tone laid on white at ``opacity``."""
    colour = _colour(tone)
    parts = [int(colour[at : at + 2], 16) for at in (1, 3, 5)]
    red, green, blue = (round(255 + (part - 255) * opacity) for part in parts)
    return red, green, blue


def _line(brush: ImageDraw.ImageDraw, part: Line, scale: float) -> None:
    width = max(1, round(part.width * scale))
    points = _scaled(part.points, scale)
    pieces = _dashed(points, [step * scale for step in part.dash]) if part.dash else [points]
    for piece in pieces:
        brush.line(piece, fill=_colour(part.tone), width=width, joint="curve")


def _dashed(points: list[Point], dash: list[float]) -> list[list[Point]]:
    """The drawn pieces of a dashed line, the pattern carried round its corners."""
    found: list[list[Point]] = []
    at, left = 0, dash[0]
    for (x, y), (to_x, to_y) in itertools.pairwise(points):
        length = ((to_x - x) ** 2 + (to_y - y) ** 2) ** 0.5
        done = 0.0
        while done < length:
            step = min(left, length - done)
            if at % 2 == 0:
                ends = (done / length, (done + step) / length)
                found.append([(x + (to_x - x) * e, y + (to_y - y) * e) for e in ends])
            done, left = done + step, left - step
            if left <= 1e-9:
                at = (at + 1) % (2 * len(dash))
                left = dash[at % len(dash)]
    return found


def _mark(brush: ImageDraw.ImageDraw, part: Marks, point: Point, scale: float) -> None:
    inside, width = _colour(part.tone if part.filled else "paper"), max(1, round(1.2 * scale))
    if part.shape == "circle":
        r = part.size / 2
        x, y = point
        box = [((x - r) * scale, (y - r) * scale), ((x + r) * scale, (y + r) * scale)]
        brush.ellipse(box, fill=inside, outline=_colour(part.tone), width=width)
        return
    edge = _scaled(corners(part.shape, part.size, point), scale)
    if len(edge) > 2:
        brush.polygon(edge, fill=inside)
    brush.line([*edge, edge[0]], fill=_colour(part.tone), width=width)


def _words(picture: Image.Image, brush: ImageDraw.ImageDraw, part: Words, scale: float) -> None:
    font = _font(round(part.size * scale), part.bold)
    anchor, colour = ANCHORS[part.anchor], _colour(part.tone)
    x, y = part.at[0] * scale, part.at[1] * scale
    if not part.turned:
        brush.text((x, y), part.text, font=font, fill=colour, anchor=anchor)
        return
    width, height = round(font.getlength(part.text)) + 2, round(1.6 * part.size * scale)
    strip = Image.new("L", (width, height), 0)
    base = round(1.2 * part.size * scale)
    ImageDraw.Draw(strip).text((0, base), part.text, font=font, fill=255, anchor="ls")
    turned = strip.rotate(90, expand=True)
    shift = {"start": width, "middle": width / 2, "end": 0}[part.anchor]
    picture.paste(colour, (round(x - base), round(y - shift)), turned)


@cache
def _font(size: int, bold: bool) -> ImageFont.FreeTypeFont:
    """DejaVu Sans, which holds the signs that are printed, as matplotlib ships it."""
    name = "DejaVuSans-Bold.ttf" if bold else "DejaVuSans.ttf"
    return ImageFont.truetype(str(packed() / name), size)
