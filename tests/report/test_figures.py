"""The pictures: what is drawn, how it reads without colour, and that it never changes by itself.

Palette: Okabe and Ito, "Color Universal Design" (2008), from memory. Contrast: the relative
luminance and contrast ratio of the Web Content Accessibility Guidelines 2.1 (W3C 2018),
success criteria 1.4.3 (text, 4.5 to 1) and 1.4.11 (graphics, 3 to 1), from memory.
"""

from __future__ import annotations

import io
import itertools
import re
import warnings
from dataclasses import replace
from pathlib import Path
from xml.etree import ElementTree

import numpy as np
import pandas as pd
import pytest
from lxml import etree
from PIL import Image

from pipeline import report as report_page
from pipeline.core.estimate import Shape
from pipeline.core.results import Results
from pipeline.report.content import report
from pipeline.report.document import Figure, Paragraph
from pipeline.report.drawings import _segments
from pipeline.report.figures import csv, png, scene, svg, titled_svg
from pipeline.report.graphs import columns_figure, distribution_figure, path_figure
from pipeline.report.material import Material
from pipeline.report.scene import COLOURS, INK, LINES, MARKERS, TONES, Words, measured
from tests.report.runs import DEALS, shaped, with_frames

SVG = "{http://www.w3.org/2000/svg}"


def figures(run: Results) -> dict[str, Figure]:
    return {figure.name: figure for figure in report(run).figures}


def words(text: str) -> str:
    return " ".join(
        " ".join(node.itertext()) for node in etree.fromstring(text.encode()).iter(f"{SVG}text")
    )


def luminance(colour: str) -> float:
    parts = (int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5))
    r, g, b = (c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in parts)
    return 0.2126 * r + 0.7152 * g + 0.0722 * b


def contrast(one: str, other: str) -> float:
    low, high = sorted((luminance(one), luminance(other)))
    return (high + 0.05) / (low + 0.05)


def test_each_figure_is_well_formed_and_names_its_axes(full: Results) -> None:
    found = figures(full)
    assert set(found) == {"average_path", "distribution", "columns", "sensitivity"}
    for figure in found.values():
        text = words(svg(figure))
        assert "bp" in text, figure.name
    assert "Sessions from the announcement" in words(svg(found["average_path"]))


def test_lines_are_named_at_their_ends(full: Results) -> None:
    text = words(svg(figures(full)["average_path"]))
    assert "paid in cash" in text
    assert "paid in shares" in text


def test_the_drawing_fits_under_its_title(full: Results) -> None:
    """The whole is as wide as the drawing and taller by the title; no text is cut off."""
    for figure in figures(full).values():
        own = ElementTree.fromstring(svg(figure)).get("viewBox", "").split()
        whole = ElementTree.fromstring(titled_svg(figure)).get("viewBox", "").split()
        assert own[2] == whole[2]
        assert float(whole[3]) == pytest.approx(
            float(own[3]) + 10 + 15 * (1 + (len(figure.title.text) > 78))
        )
        drawn = scene(figure)
        for part in drawn.parts:
            if isinstance(part, Words):
                across = measured(part.text, part.size) if not part.turned else 0.0
                before = {"start": 0.0, "middle": across / 2, "end": across}[part.anchor]
                assert part.at[0] - before > -6, part.text
                assert part.at[0] - before + across < drawn.width + 12, part.text
                assert 0 < part.at[1] < drawn.height, part.text


def test_the_file_carries_its_takeaway(full: Results) -> None:
    figure = figures(full)["columns"]
    shown = words(titled_svg(figure)).replace("  ", " ")
    for part in figure.title.text.split():
        assert part in shown


def test_groups_differ_by_more_than_colour() -> None:
    assert len(set(map(str, LINES))) == len(set(MARKERS)) == len(COLOURS) == 4


def test_colours_stand_out_from_paper_and_from_each_other() -> None:
    assert contrast(INK, "#fffefb") >= 4.5
    for colour in COLOURS[:3]:
        assert contrast(colour, "#fffefb") >= 3
    assert COLOURS[:2] == ("#0072b2", "#d55e00")
    lights = sorted(luminance(c) for c in COLOURS[:3])
    assert all(b - a > 0.02 for a, b in itertools.pairwise(lights))


def palettes() -> list[dict[str, str]]:
    """The page's tones as its style declares them: by day, in the dark, in print."""
    css = Path(report_page.__file__).with_name("page.css").read_text(encoding="utf-8")
    blocks = re.findall(r"--ink: [^}]*}", css)
    return [dict(re.findall(r"--(\w+): (#?\w+);", block)) for block in blocks]


def test_the_page_declares_every_tone_for_day_night_and_print() -> None:
    """A page that gives a tone no colour in the dark would draw it in the paper's own."""
    day, dark, printed = palettes()
    for name, colour in TONES.items():
        if name not in ("ink", "faint", "paper"):
            assert day[name] == printed[name] == colour
        drawn = dark["thin" if name == "faint" else name]
        if name not in ("strip", "paper"):
            assert contrast(drawn, dark["paper"]) >= 3, name
    lights = sorted(luminance(dark[name]) for name in ("one", "two", "three"))
    assert all(b - a > 0.02 for a, b in itertools.pairwise(lights))


def test_the_same_figure_gives_the_same_bytes(full: Results) -> None:
    for figure in figures(full).values():
        assert svg(figure) == svg(figure)
        assert png(figure) == png(figure)
        assert not re.search(r"20\d\d-\d\d-\d\dT", svg(figure))


def test_the_png_shows_what_the_svg_shows(full: Results) -> None:
    figure = figures(full)["columns"]
    picture = Image.open(io.BytesIO(png(figure)))
    view = etree.fromstring(svg(figure).encode()).get("viewBox")
    assert view is not None
    width, height = (float(part) for part in view.split()[2:])
    assert picture.width / picture.height == pytest.approx(width / height, rel=0.01)
    assert len(set(picture.convert("L").tobytes())) > 10


@pytest.mark.parametrize(
    "shape, spans",
    [
        (Shape.INTERVAL, [(-227.0, 48.0)]),
        (Shape.RAYS, [(-500.0, -310.0), (120.0, 400.0)]),
        (Shape.LINE, [(-500.0, 400.0)]),
        (Shape.EMPTY, []),
    ],
)
def test_all_shapes_of_a_set_are_drawn(shape: Shape, spans: list[tuple[float, float]]) -> None:
    figure = columns_figure(Material.of(shaped(shape)))
    assert figure is not None
    row = figure.data.loc[figure.data["lead"]].iloc[0]
    assert row["shape"] == shape
    bare = row.rename(lambda name: name.removesuffix("_bp"))
    np.testing.assert_allclose(_segments(bare, -500.0, 400.0), spans)
    assert ("empty set" in words(svg(figure))) == (shape is Shape.EMPTY)


def test_the_path_holds_the_run_s_numbers(full: Results) -> None:
    figure = path_figure(Material.of(full))
    assert figure is not None
    np.testing.assert_allclose(figure.data["mean_bp"], full.paths["mean"] * 1e4)
    assert "pointwise" in figure.caption.text
    assert figure.title.text.endswith("paid in cash 42 bp, paid in shares −231 bp")


def test_bars_count_every_deal(full: Results) -> None:
    figure = distribution_figure(Material.of(full))
    assert figure is not None
    assert figure.data["deals"].sum() == DEALS
    sums = figure.data.groupby("group")["share_percent"].sum()
    np.testing.assert_allclose(sums, 100)


def test_labels_of_any_length_and_kind_are_drawn(full: Results) -> None:
    label = "a very long name of a group with $x_1$ & <b>, " * 4
    study = replace(full.study, groups=(label, "paid in shares"))
    run = replace(full, study=study, paths=full.paths.replace({"paid in cash": label}))
    found = figures(with_frames(run))
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        texts = [words(titled_svg(figure)) for figure in found.values()]
        assert all(png(figure) for figure in found.values())
    assert "$x_1$" in texts[0]


def test_many_variants_are_drawn_in_order_of_size(full: Results) -> None:
    rows = pd.concat([full.sensitivity] * 30, ignore_index=True)
    rows["variant"] = [f"variant {i}" for i in range(len(rows))]
    figure = figures(with_frames(replace(full, sensitivity=rows)))["sensitivity"]
    text = words(svg(figure))
    assert "variant 7" not in text
    assert "names in the table" in text


def test_each_number_varied_has_a_figure_of_its_own(full: Results) -> None:
    frame = full.sensitivity.assign(
        target=["mean reaction", "effect of the feature", "mean reaction"]
    )
    found = figures(with_frames(replace(full, sensitivity=frame)))
    assert {"sensitivity", "sensitivity_effect_of_the_feature"} <= set(found)
    assert len(found["sensitivity"].data) == 2


def test_data_beside_a_figure_reads_back(full: Results) -> None:
    figure = figures(full)["average_path"]
    again = pd.read_csv(io.BytesIO(csv(figure.data)))
    pd.testing.assert_frame_equal(again, figure.data, check_dtype=False)
    assert b"\r" not in csv(figure.data)


def test_data_beside_a_figure_runs_no_formula() -> None:
    """Leading = + - @ start a formula in a spreadsheet (OWASP, CSV Injection; from memory)."""
    risky = ["=1+1", "+1", "-1+2", "@SUM(A1)", " =1", "plain"]
    text = csv(pd.DataFrame({"group": risky, "n": [-1, 2, 3, 4, 5, 6]})).decode()
    cells = [line.split(",")[0] for line in text.splitlines()[1:]]
    assert cells == ["'=1+1", "'+1", "'-1+2", "'@SUM(A1)", "' =1", "plain"]
    assert text.splitlines()[1].endswith(",-1")


def test_figures_carry_a_description(full: Results) -> None:
    for figure in figures(full).values():
        assert len(figure.alt) > 30
        assert isinstance(figure.title, Paragraph)
