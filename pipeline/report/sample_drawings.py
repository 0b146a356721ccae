"""Drawings of the sample: when deals happened, how alike the groups are, what instruments move."""

from __future__ import annotations

from collections.abc import Callable, Mapping

import numpy as np
import pandas as pd

from pipeline.report.axes import Axes, axes, legend, reach, rows, zero_lines
from pipeline.report.document import Figure
from pipeline.report.scene import (
    DASHES,
    DOTS,
    MARKERS,
    SERIES,
    SIZE,
    SMALL,
    WIDTH,
    Marks,
    Scene,
    Words,
    measured,
    wrapped,
)

BOX = 17.0
LETTERS = "JFMAMJJASOND"
FAINTEST, DARKEST = 0.08, 0.75
PANEL = 150.0
NAMED = 3
MOST_YEARS = 40


def _calendar(figure: Figure) -> Scene:
    months = figure.data[figure.data["part"] == "month"]
    years = sorted(months["year"].astype(int).unique())[-MOST_YEARS:]
    top, left = 26.0, 52.0
    grid = top + BOX * len(years)
    scene = Scene(WIDTH, grid + 150)
    wide = (WIDTH - left - 60) / 12
    made = Axes(scene, left, top, left + 12 * wide, grid, (0.0, 12.0), (-float(len(years)), 0.0))
    most = max(float(months["deals"].max()), 1.0)
    for month, letter in enumerate(LETTERS):
        scene.add(Words((left + (month + 0.5) * wide, top - 7), letter, "ink", SMALL, "middle"))
    scene.add(Words((WIDTH - 12, top - 7), "all", "ink", SMALL, "end"))
    for row, year in enumerate(years):
        own = months[months["year"] == year]
        counts = dict(zip(own["month"].astype(int), own["deals"].astype(int), strict=True))
        middle = top + (row + 0.5) * BOX + 0.35 * SMALL
        scene.add(Words((left - 8, middle), str(year), "ink", SMALL, "end"))
        scene.add(Words((WIDTH - 12, middle), f"{sum(counts.values()):,}", "ink", SMALL, "end"))
        for month, deals in counts.items():
            _month(made, month - 1, row, deals, most)
    _shared(scene, figure, grid + 16)
    return scene


def _month(made: Axes, month: int, row: int, deals: int, most: float) -> None:
    tone = "one" if deals else "strip"
    shade = FAINTEST + (DARKEST - FAINTEST) * deals / most if deals else 0.6
    made.bar((month + 0.04, month + 0.96), (-row - 0.94, -row - 0.06), tone, shade)
    if deals:
        x, y = made.at(month + 0.5, -row - 0.5)
        made.scene.add(Words((x, y + 0.35 * SMALL), str(deals), "ink", SMALL, "middle"))


def _shared(scene: Scene, figure: Figure, top: float) -> None:
    shared = figure.data[figure.data["part"] == "shared"]
    last = float(shared["others"].max())
    made = axes(
        scene, (-0.6, last + 0.6), (0.0, 1.1 * float(shared["deals"].max())),
        "Other deals whose headline window meets theirs", "Deals", top=top, left=52, right=60,
        whole=True,
    )  # fmt: skip
    for others, deals in zip(shared["others"], shared["deals"], strict=True):
        if deals:
            made.bar((others - 0.4, others + 0.4), (0.0, float(deals)), "one", 0.55)


def _bins(figure: Figure) -> Scene:
    data = figure.data
    names = list(dict.fromkeys(data["label"].astype(str)))
    scene = Scene(WIDTH, 8 + (PANEL + 48) * len(names))
    up = reach(data["treatment_mean"])
    for at, name in enumerate(names):
        part = data[data["label"] == name]
        begin = 8 + (PANEL + 48) * at
        x = part["instrument_mean"]
        made = axes(
            scene, reach(x), up, wrapped(f"{name}, what the controls leave of it", 80, 1),
            wrapped(f"{figure.axis}, what the controls leave", 26, 2),
            top=begin, bottom=begin + PANEL + 48, left=72,
        )  # fmt: skip
        zero_lines(made, x=True)
        slope = float(part["slope"].iloc[0])
        ends = np.array(made.x)
        made.line(ends, slope * ends, SERIES[1], 1.6, DASHES)
        made.dots(x, part["treatment_mean"], SERIES[0], MARKERS[0], 5.5)
    return scene


def _overlap(figure: Figure) -> Scene:
    data, scene = figure.data, Scene(WIDTH, 250.0)
    groups = list(dict.fromkeys(data["group"]))
    most = 1.15 * float(data["share_percent"].max())
    span = (float(data["from_percent"].min()), float(data["to_percent"].max()))
    made = axes(scene, span, (-most, most), wrapped(figure.axis, 80, 1),
                "Share of the group's deals (%)", marked=(True, False), left=30)  # fmt: skip
    made.across(0.0)
    for at, group in enumerate(groups):
        bars, sign = data[data["group"] == group], 1 if at == 0 else -1
        for low, high, share in zip(
            bars["from_percent"], bars["to_percent"], bars["share_percent"], strict=True
        ):
            if share > 0:
                ends = sorted((0.0, sign * share))
                made.bar((low, high), (ends[0], ends[1]), SERIES[at], 0.55, hatched=at == 1,
                         outline=True)  # fmt: skip
        words = f"{wrapped(str(group), 40, 1)}: {int(bars['deals'].sum()):,} deals"
        level = made.top + 10 if at == 0 else made.bottom - 6
        scene.add(Words((made.right, level), words, SERIES[at], SIZE, "end"))
    tallest = float(data["share_percent"].max())
    scene.add(Words((made.left + 4, made.top + 10), f"tallest bar {tallest:.0f}%", "ink", SMALL))
    return scene


def _balance(figure: Figure) -> Scene:
    data = figure.data
    names = [wrapped(str(name), 38, 2) for name in data["label"]]
    limit = figure.marks["limit"]
    scene = Scene(WIDTH, 22.0 * len(data) + 76)
    span = reach(data["before"], data["after"], [-1.3 * limit, 1.3 * limit])
    made = rows(scene, span, names, "Difference of the groups' means (standard deviations)",
                top=30)  # fmt: skip
    made.upright(0.0)
    for side in (-limit, limit):
        made.upright(side, dash=DOTS)
    for at, (before, after) in enumerate(zip(data["before"], data["after"], strict=True)):
        made.line((before, after), (-at, -at), "faint", 0.8)
        made.dots([before], [-at], SERIES[0], MARKERS[0], 6, filled=False)
        made.dots([after], [-at], SERIES[1], MARKERS[1], 6)
    half = (made.left + made.right) / 2
    before_mark = Marks((), MARKERS[0], 6, SERIES[0], False)
    legend(scene, (made.left, 14), [("before weighting", before_mark)])
    legend(scene, (half, 14), [("after weighting", Marks((), MARKERS[1], 6, SERIES[1]))])
    return scene


def _correction(figure: Figure) -> Scene:
    data, scene = figure.data, Scene(WIDTH, 390.0)
    span = reach(data["mills"], data["predicted"])
    made = axes(
        scene, span, span, "", "Correction (inverse Mills ratio)", bottom=270, left=62,
    )  # fmt: skip
    made.line(span, span, SERIES[1], 1.4, DASHES)
    made.dots(data["predicted"], data["mills"], SERIES[0], MARKERS[0], 3, filled=False)
    middle = (made.left + made.right) / 2
    below = made.bottom + 27
    scene.block((middle, below), "Its best straight-line prediction from the controls",
                anchor="middle")  # fmt: skip
    counts, edges = np.histogram(data["mills"], np.linspace(*span, 31))
    under = axes(
        scene, span, (0.0, 1.1 * float(counts.max())), "Correction (inverse Mills ratio)", "Deals",
        top=292, left=62, whole=True,
    )  # fmt: skip
    for low, high, deals in zip(edges[:-1], edges[1:], counts, strict=True):
        if deals:
            under.bar((low, high), (0.0, float(deals)), SERIES[0], 0.55, outline=True)
    return scene


def _placebo(figure: Figure) -> Scene:
    data, scene, own = figure.data, Scene(WIDTH, 230.0), figure.marks["own"]
    span = reach(data["from"], data["to"], [own], zero=True)
    made = axes(scene, span, (0.0, 1.2 * float(data["samples"].max())),
                wrapped(figure.axis, 80, 1), "Samples", whole=True)  # fmt: skip
    for low, high, samples in zip(data["from"], data["to"], data["samples"], strict=True):
        if samples:
            made.bar((low, high), (0.0, float(samples)), SERIES[0], 0.55, outline=True)
    made.upright(0.0, dash=DOTS)
    made.upright(own, SERIES[1], 2.6)
    x = made.at(own, 0.0)[0]
    anchor = "end" if x > (made.left + made.right) / 2 else "start"
    place = (x + (-6 if anchor == "end" else 6), made.top + 9)
    scene.add(Words(place, "the deals", SERIES[1], SIZE, anchor))
    return scene


def _left_out(figure: Figure) -> Scene:
    data = figure.data
    kinds = list(dict.fromkeys(data["dimension"].astype(str)))
    scene = Scene(WIDTH, 30 + 120.0 * len(kinds))
    full, error = figure.marks["full"], figure.marks["error"]
    span = reach(data["estimate"], [full - error, full + error])
    wide = max(measured(f"{value:,.1f}") for value in span)
    for at, kind in enumerate(kinds):
        part = data[data["dimension"] == kind].sort_values("estimate", kind="stable")
        last = at == len(kinds) - 1
        words = wrapped(figure.axis, 22, 2)
        made = axes(
            scene, (0.0, len(part) + 1.0), span, "", words, top=20 + 120.0 * at,
            bottom=14 + 120.0 * (at + 1), left=52 + wide / 2, marked=(False, True),
        )  # fmt: skip
        made.bar(made.x, (full - error, full + error), "strip")
        made.across(full, "ink", 0.9, DASHES)
        place = np.arange(1, len(part) + 1)
        tone, shape = SERIES[at % 4], MARKERS[at % 4]
        made.dots(place, part["estimate"], tone, shape, 3)
        heading = f"without one {kind} in turn: {len(part):,}"
        scene.add(Words((made.left + 4, made.top - 3), heading, tone, SMALL))
        _extremes(made, part, place, full)
        if last:
            middle = (made.left + made.right) / 2
            scene.block((middle, made.bottom + 16), "In order of size", anchor="middle")
    return scene


def _extremes(made: Axes, part: pd.DataFrame, place: np.ndarray, full: float) -> None:
    """The names of what moves the number most at either end."""
    values = part["estimate"].to_numpy(dtype=np.float64)
    for at, anchor, side in ((0, "start", 7), (len(values) - 1, "end", -7)):
        x, y = made.at(float(place[at]), float(values[at]))
        down = 3 if y < made.bottom - 4 else -2
        words = wrapped(str(part["group"].iloc[at]), 40, 1)
        made.scene.add(Words((x + side, y + down), words, "ink", 7.5, anchor))


def _days(figure: Figure) -> Scene:
    data, scene = figure.data, Scene(WIDTH, 210.0)
    names = ("session", "abnormal_bp", "band_bp")
    x, y, band = (data[name].to_numpy(dtype=np.float64) for name in names)
    span = (float(x.min()) - 0.6, float(x.max()) + 0.6)
    up = reach(y, band, -band, zero=True)
    made = axes(scene, span, up, "Sessions from the announcement", "Abnormal return (bp)")
    made.bar((figure.marks["from"] - 0.5, figure.marks["to"] + 0.5), made.y, "strip")
    made.band(x, -band, band, SERIES[0], 0.13)
    made.across(0.0)
    made.stems(x, y)
    outside = np.abs(y) > band
    made.dots(x[~outside], y[~outside], SERIES[0], MARKERS[0], 5, filled=False)
    made.dots(x[outside], y[outside], SERIES[1], MARKERS[1], 6)
    return scene


DRAWINGS: Mapping[str, Callable[[Figure], Scene]] = {
    "calendar": _calendar,
    "bins": _bins,
    "overlap": _overlap,
    "balance": _balance,
    "correction": _correction,
    "placebo": _placebo,
    "left_out": _left_out,
    "days": _days,
}
