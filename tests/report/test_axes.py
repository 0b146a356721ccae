"""From data to points: round ticks, what is cut off, and what a scene looks like as SVG and PNG.

A cut segment is held against many points along it.
"""

from __future__ import annotations

import io
import math

import numpy as np
from hypothesis import given
from hypothesis import strategies as st
from lxml import etree
from PIL import Image

from pipeline.report import raster, vector
from pipeline.report.axes import _cut, axes, labels, reach, rows, ticks
from pipeline.report.scene import TONES, Area, Line, Marks, Scene, Stems, Words

NUMBER = st.floats(-1e6, 1e6)


@given(NUMBER, st.floats(1e-6, 1e6), st.integers(3, 12))
def test_ticks_are_round_few_and_inside(low: float, width: float, most: int) -> None:
    high = low + width
    found = ticks((low, high), most)
    assert len(found) <= most
    if high - low > 1e-9 * max(abs(low), abs(high)):
        room = 1e-6 * (high - low)
        assert all(low - room <= value <= high + room for value in found)
        steps = np.diff(found)
        assert len(found) < 2 or np.allclose(steps, steps[0])


def test_labels_have_the_decimals_they_need_and_no_more() -> None:
    assert next(text for _, text in labels(ticks((-1000, 1000)))) == "−1,000"
    assert [text for _, text in labels(ticks((0, 0.3)))] == [
        "0.00", "0.05", "0.10", "0.15", "0.20", "0.25", "0.30",
    ]  # fmt: skip
    assert labels(()) == []


@given(*[st.tuples(st.floats(-3, 3), st.floats(-3, 3)) for _ in range(2)])
def test_what_is_left_of_a_segment_is_what_is_inside(
    a: tuple[float, float], b: tuple[float, float]
) -> None:
    cut = _cut(a, b, (-1, 1), (-1, 1))
    share = np.linspace(0, 1, 301)[:, None]
    along = np.array(a) * (1 - share) + np.array(b) * share
    inside = (np.abs(along) < 1 - 1e-9).all(axis=1)
    if cut is None:
        assert not inside.any()
        return
    ends = np.array(cut)
    assert (np.abs(ends) <= 1 + 1e-9).all()
    for point in along[inside]:
        low, high = ends.min(axis=0) - 1e-9, ends.max(axis=0) + 1e-9
        assert ((point >= low) & (point <= high)).all()


def test_gaps_break_a_line_and_what_lies_outside_is_not_drawn() -> None:
    scene = Scene(300, 200)
    made = axes(scene, (0, 4), (0, 1))
    before = len(scene.parts)
    made.line([0, 1, 2, 3, 4], [0.5, 0.5, math.nan, 0.5, 0.5], "one")
    assert len(scene.parts) == before + 2
    made.line([0, 4], [2, 2], "one")
    made.dots([9], [0.5], "one")
    assert len(scene.parts) == before + 2


def test_a_span_holds_its_values_even_if_none_differ_or_none_is_known() -> None:
    assert reach([3, 3])[0] < 3 < reach([3, 3])[1]
    assert reach([], [math.nan]) == (0, 1)
    assert reach([5, 9], zero=True)[0] < 0


def everything() -> Scene:
    scene = Scene(200, 120)
    made = rows(scene, (-1, 1), ["first", "second"], "words & <marks>")
    made.bar((-0.5, 0.5), (-1, 0), "two", 0.5, hatched=True, outline=True)
    made.stems(np.array([0.2, math.nan]), np.array([-0.5, 0.1]))
    for at, shape in enumerate(("circle", "square", "triangle", "diamond", "left", "right")):
        made.dots([at / 10], [0.0], "one", shape, filled=bool(at % 2))
    made.line([-1, 1], [0, -1], "four", 2, (4, 2))
    scene.add(Words((10, 50), "a < b & c", turned=True, bold=True))
    return scene


def test_a_scene_of_everything_is_well_formed_and_keeps_its_tones() -> None:
    tree = etree.fromstring(vector.svg(everything()).encode())
    classes = {name for node in tree.iter() for name in (node.get("class") or "").split()}
    assert classes <= {f"{side}-{tone}" for side in "fs" for tone in TONES}
    assert "a < b & c" in ["".join(node.itertext()) for node in tree.iter("{*}text")]
    for node in tree.iter("{*}path"):
        numbers = (node.get("d") or "").replace("M", " ").replace("L", " ")
        assert "nan" not in numbers
        assert "e" not in numbers.lower().replace("z", "")
    kinds = {type(part) for part in everything().parts}
    assert kinds == {Line, Stems, Area, Marks, Words}


def test_the_raster_paints_where_the_vector_does() -> None:
    scene = Scene(100, 60)
    scene.add(Area(((10, 10), (40, 10), (40, 40), (10, 40)), "one"))
    scene.add(Marks(((75, 25),), "circle", 20, "two"))
    scene.add(Line(((10, 50), (90, 50)), "ink", 2, (10, 10)))
    picture = Image.open(io.BytesIO(raster.png(scene, 72))).convert("RGB")
    assert picture.size == (100, 60)
    tone = tuple(int(TONES["one"][at : at + 2], 16) for at in (1, 3, 5))
    assert np.abs(np.array(picture.getpixel((25, 25))) - tone).max() < 6
    assert picture.getpixel((55, 25)) == (255, 255, 255)
    red, _, blue = picture.getpixel((75, 25))
    assert red > 180 > blue + 60
    dashes = [picture.getpixel((x, 50))[0] < 128 for x in (15, 25, 35, 45)]
    assert dashes == [True, False, True, False]
