"""Drawings of the doubts: assumptions side by side, hidden factors, added error, violations."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

import contourpy
import numpy as np
import pandas as pd

from pipeline.core.prices import Floats
from pipeline.report.axes import Axes, axes, legend, reach, rows, ticks, zero_lines
from pipeline.report.document import Figure
from pipeline.report.numerals import show
from pipeline.report.scene import (
    DASHES,
    DOTS,
    LINES,
    MARKERS,
    SERIES,
    SMALL,
    WIDTH,
    Line,
    Marks,
    Scene,
    wrapped,
)

LABELLED_POINTS = 3
LABEL = 58
ROW = 28.0
INCH = 72.0
MOST_CONTOURS = 9


def _assumptions(figure: Figure) -> Scene:
    data = figure.data.reset_index(drop=True)
    names = [wrapped(str(text), LABEL, 2) for text in data["label"]]
    scene = Scene(WIDTH, 0.75 * INCH + ROW * len(data))
    made = rows(scene, _span(data), names, wrapped(figure.axis, 70, 2), size=7.5)
    made.upright(0.0)
    for mark in ("lead", "other"):
        if mark in figure.marks:
            tone = SERIES[1] if mark == "lead" else SERIES[0]
            made.upright(figure.marks[mark], tone, 0.8, DASHES)
    for at, (_, row) in enumerate(data.iterrows()):
        _assumption(made, -float(at), row)
    return scene


def _span(data: pd.DataFrame) -> tuple[float, float]:
    """The estimates and most ends; ends far away are left to arrows."""
    middle = data["estimate"].to_numpy(dtype=np.float64)
    every = data[["low", "high"]].to_numpy(dtype=np.float64)
    width = np.median(np.diff(every, axis=1)[np.isfinite(every).all(axis=1)]) if len(data) else 1.0
    ends = every[np.isfinite(every)]
    low = max(min([*ends, *middle, 0.0]), middle.min() - 3 * width)
    high = min(max([*ends, *middle, 0.0]), middle.max() + 3 * width)
    low, high = min(low, 0.0), max(high, 0.0)
    margin = 0.05 * (high - low) or 1.0
    return low - margin, high + margin


def _assumption(made: Axes, y: float, row: pd.Series[Any]) -> None:
    lead, reported = bool(row["lead"]), bool(row["reported"])
    tone, (left, right) = SERIES[1] if lead else SERIES[0], made.x
    low, high = (float(row[name]) for name in ("low", "high"))
    if not (np.isnan(low) or np.isnan(high)):
        made.line((max(low, left), min(high, right)), (y, y), tone, 1.5)
        if low < left:
            made.dots([left], [y], tone, "left", 5)
        if high > right:
            made.dots([right], [y], tone, "right", 5)
    shape, size = MARKERS[1] if lead else MARKERS[0], 6.5 if reported else 5.0
    made.dots([row["estimate"]], [y], tone, shape, size, filled=reported)


def _hidden(figure: Figure) -> Scene:
    data = figure.data
    grid = data[data["label"] == ""]
    x, y = 100 * np.unique(grid["with_treatment"]), 100 * np.unique(grid["with_outcome"])
    shape = (len(y), len(x))
    estimates = grid["estimate"].to_numpy(dtype=np.float64).reshape(shape)
    t = np.abs(grid["statistic"].to_numpy(dtype=np.float64)).reshape(shape)
    scene = Scene(WIDTH, 4.4 * INCH)
    points = data[data["label"] != ""]
    across = reach(x, 100 * points["with_treatment"], margin=0.02)
    up = reach(y, 100 * points["with_outcome"], margin=0.02)
    made = axes(
        scene, across, up, "Share of what is left of the feature that it explains (%)",
        wrapped(figure.axis, 45, 2), right=28,
    )  # fmt: skip
    for level in ticks((float(estimates.min()), float(estimates.max())), MOST_CONTOURS):
        _contour(made, (x, y, estimates), level, "faint", 0.9, words=show(level))
    _contour(made, (x, y, estimates), 0.0, SERIES[1], 2.0)
    _contour(made, (x, y, t), figure.marks["reach"], SERIES[0], 1.6, LINES[1])
    _points(made, points)
    return scene


def _contour(made: Axes, surface: tuple[Floats, Floats, Floats], level: float, tone: str,
             width: float, dash: tuple[float, ...] = (), words: str = "") -> None:  # fmt: skip
    """The lines along which the surface (x, y, heights) is at ``level``, named where they end."""
    for line in contourpy.contour_generator(*surface).lines(level):
        path = np.asarray(line)
        made.line(path[:, 0], path[:, 1], tone, width, dash)
        if words and len(path) > 1:
            end = path[np.argmax(path[:, 0] - path[:, 1])]
            x, y = made.at(float(end[0]), float(end[1]))
            outside = x > made.right - 12
            place = (x + (3 if outside else 0), y + (3 if outside else -4))
            made.scene.block(place, words, size=7.5)


def _points(made: Axes, points: pd.DataFrame) -> None:
    """The controls as points, the strongest few of them named."""
    size = points["with_treatment"] + points["with_outcome"]
    order = size.sort_values(ascending=False).index[:LABELLED_POINTS]
    x, y = 100 * points["with_treatment"], 100 * points["with_outcome"]
    made.dots(x, y, "ink", MARKERS[3], 5)
    by_height = points.loc[order].sort_values("with_outcome", kind="stable").index
    for at, index in enumerate(by_height):
        place = made.at(float(x[index]), float(y[index]))
        words = (place[0] + 16, place[1] - 10 - 13 * at)
        made.scene.add(Line((place, (words[0] - 2, words[1] - 2)), "faint", 0.6))
        made.scene.block(words, wrapped(str(points.loc[index, "label"]), 60, 1), size=SMALL)


def _extrapolation(figure: Figure) -> Scene:
    scene, data = Scene(WIDTH, 3.6 * INCH), figure.data
    curves = list(data.groupby("curve", sort=False))
    made = axes(
        scene, reach(data["zeta"], zero=True), reach(data["estimate"]),
        "Error added, over the error there is (at minus one there is none)",
        wrapped(figure.axis, 45, 2), top=22 + 13 * ((len(curves) + 1) // 2),
    )  # fmt: skip
    made.upright(-1, dash=DOTS)
    made.upright(0.0)
    for at, (name, line) in enumerate(curves):
        x, y = line["zeta"], line["estimate"]
        if name == "simulated":
            made.dots(x, y, SERIES[at % 4], MARKERS[0], 6)
            continue
        made.line(x, y, SERIES[at % 4], 1.5, LINES[at % 4])
        made.dots(x.iloc[[0]], y.iloc[[0]], SERIES[at % 4], MARKERS[at % 4], 5)
    samples = [
        Marks((), MARKERS[0], 6, SERIES[at % 4]) if name == "simulated" else
        Line((), SERIES[at % 4], 1.5, LINES[at % 4]) for at, (name, _) in enumerate(curves)
    ]  # fmt: skip
    _legend(made, [str(name) for name, _ in curves], samples)
    return scene


def _violations(figure: Figure) -> Scene:
    scene, data = Scene(WIDTH, 3.8 * INCH), figure.data
    kinds = list(data.groupby("kind", sort=False))
    made = axes(
        scene, (0.0, 100.0), reach(data["low"], data["high"], zero=True),
        "Share of the reduced form by which the instruments may act directly (%)",
        wrapped(figure.axis, 45, 2), top=22 + 13 * ((len(kinds) + 1) // 2),
    )  # fmt: skip
    zero_lines(made)
    for at, (_, lines) in enumerate(kinds):
        for side in ("low", "high"):
            made.line(100 * lines["share"], lines[side], SERIES[at % 4], 1.6, LINES[at % 4])
    samples = [Line((), SERIES[at % 4], 1.6, LINES[at % 4]) for at in range(len(kinds))]
    _legend(made, [str(kind) for kind, _ in kinds], samples)
    return scene


def _legend(made: Axes, names: list[str], samples: list[Any]) -> None:
    """The names above the axes, in two columns."""
    entries, half = list(zip(names, samples, strict=True)), (len(names) + 1) // 2
    legend(made.scene, (made.left, 14), entries[:half])
    legend(made.scene, ((made.left + made.right) / 2, 14), entries[half:])


DRAWINGS: Mapping[str, Callable[[Figure], Scene]] = {
    "assumptions": _assumptions,
    "hidden": _hidden,
    "extrapolation": _extrapolation,
    "violations": _violations,
}
