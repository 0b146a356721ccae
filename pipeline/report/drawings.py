"""Drawings of the results: paths, distributions, estimates with intervals, curves, choices."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

import numpy as np
import pandas as pd

from pipeline.report.axes import Axes, axes, reach, rows, zero_lines
from pipeline.report.document import Figure
from pipeline.report.numerals import clean
from pipeline.report.scene import (
    DASHES,
    DOTS,
    LEADING,
    LINES,
    MARKERS,
    SERIES,
    SIZE,
    SMALL,
    WIDTH,
    Scene,
    measured,
    wrapped,
)

LABELLED = 45
LIKELIHOOD_DROP = 1.92
"""Half the 95% point of χ²(1)."""
DEEPEST = 15.0
INCH = 72.0


def _path(figure: Figure) -> Scene:
    scene, data = Scene(WIDTH, 4.0 * INCH), figure.data
    groups = list(data.groupby("group", sort=False))
    names = {str(group): wrapped(str(group), 18, 3) for group, _ in groups}
    edges = [data[name] for name in ("low", "high", "low_path", "high_path") if name in data]
    span = (float(data["session"].min()) - 0.5, float(data["session"].max()) + 0.5)
    made = axes(
        scene, span, reach(*edges, zero=True), "Sessions from the announcement",
        "Mean cumulative abnormal return (bp)", right=16 + max(map(measured, names.values())),
    )  # fmt: skip
    window = figure.marks["from"] - 0.5, figure.marks["to"] + 0.5
    made.bar(window, made.y, "strip")
    zero_lines(made, x=True)
    for at, (_, path) in enumerate(groups):
        made.band(path["session"], path["low"], path["high"], SERIES[at % 4], 0.13)
    for at, (_, path) in enumerate(groups):
        _one_path(made, path, at % 4)
    _end_labels(made, [(names[str(group)], path) for group, path in groups])
    return scene


def _one_path(made: Axes, path: pd.DataFrame, at: int) -> None:
    tone = SERIES[at]
    for edge in ("low_path", "high_path"):
        if edge in path:
            made.line(path["session"], path[edge], tone, 0.7, DOTS)
    made.line(path["session"], path["mean"], tone, 1.8, LINES[at])
    every = path.iloc[:: max(1, len(path) // 8)]
    made.dots(every["session"], every["mean"], tone, MARKERS[at], 5)


def _end_labels(made: Axes, ends: list[tuple[str, pd.DataFrame]]) -> None:
    """Name the lines at their ends, pushed apart where they would meet."""
    heights = [SIZE * LEADING * (text.count("\n") + 1) for text, _ in ends]
    levels = [made.at(made.x[1], float(path["mean"].iloc[-1]))[1] for _, path in ends]
    order = sorted(range(len(ends)), key=lambda i: levels[i])
    below = -np.inf
    for at in order:
        level = max(levels[at], below + heights[at] / 2)
        below = level + heights[at] / 2
        place = (made.right + 6, level)
        made.scene.block(place, ends[at][0], tone=SERIES[at % 4], middle=True)


def _curve(figure: Figure) -> Scene:
    scene = Scene(WIDTH, 3.2 * INCH)
    x, y = figure.data["effect"], figure.data["power_percent"]
    last = float(min(x.max(), 4 * figure.marks["detectable"]))
    made = axes(scene, (0.0, last if last > 0 else 1.0), (0.0, 103.0),
                "True mean abnormal return (bp)", "Chance that a test finds it (%)")  # fmt: skip
    made.across(80, dash=DOTS)
    made.upright(figure.marks["detectable"], dash=DOTS)
    made.line(x, y, SERIES[0], 1.8)
    made.dots(x, y, SERIES[0], MARKERS[0], 4)
    return scene


def _profile(figure: Figure) -> Scene:
    scene, data = Scene(WIDTH, 3.2 * INCH), figure.data
    floor = max(float(data["log_likelihood"].min()), -DEEPEST) - 0.5
    made = axes(
        scene, (-1.0, 1.0), (floor, 0.7), "Correlation between announcing and return",
        "Log-likelihood below the highest seen",
    )  # fmt: skip
    made.across(-LIKELIHOOD_DROP, dash=LINES[1])
    if "estimate" in figure.marks:
        made.upright(figure.marks["estimate"], SERIES[1], 1.2, DASHES)
    made.line(data["rho"], data["log_likelihood"], SERIES[0], 1.8)
    made.dots(data["rho"], data["log_likelihood"], SERIES[0], MARKERS[0], 3.5)
    return scene


def _choice_rows(data: pd.DataFrame) -> list[tuple[str, str]]:
    """(column, choice) of every choice that some estimate makes and some does not."""
    columns = [name for name in data.columns if data[name].dtype == "object" or
               pd.api.types.is_string_dtype(data[name])]  # fmt: skip
    return [(name, str(choice)) for name in columns if data[name].nunique() > 1
            for choice in dict.fromkeys(sorted(data[name]))]  # fmt: skip


def _choices(figure: Figure) -> Scene:
    data = figure.data
    choices = [(name, choice, wrapped(choice, 44, 1)) for name, choice in _choice_rows(data)]
    names = [words for _, _, words in choices]
    upper, lower = 2.2 * INCH, 11.0 * len(choices) + 40
    scene = Scene(WIDTH, upper + lower)
    x, span = data["rank"], (0.0, float(len(data) + 1))
    edge = 10 + max((measured(name, SMALL) for name in names), default=60.0) + 8
    above = axes(
        scene, span, reach(data["low"], data["high"], zero=True), "", wrapped(figure.axis, 34, 2),
        bottom=upper, left=max(edge, 60.0), marked=(False, True),
    )  # fmt: skip
    for place, low, high in zip(x, data["low"], data["high"], strict=True):
        above.line((place, place), (low, high), "strip", 1.2)
    zero_lines(above)
    above.dots(x, data["estimate"], SERIES[0], MARKERS[0], 2.2)
    at = figure.marks["headline"]
    if at:
        above.dots([at], data["estimate"].iloc[[int(at) - 1]], SERIES[1], MARKERS[1], 6)
    below = axes(
        scene, span, (-len(names) + 0.5, 0.5), "Ways to make the estimate, sorted",
        top=upper + 4, left=max(edge, 60.0), marked=(True, False),
    )  # fmt: skip
    for place, (name, choice, words) in enumerate(choices):
        made = x[data[name].astype(str) == choice]
        below.dots(made, np.full(len(made), -place), "ink", "tick", 5)
        level = below.at(span[0], -place)[1]
        scene.block((below.left - 9, level), words, size=SMALL, anchor="end", middle=True)
    return scene


def _distribution(figure: Figure) -> Scene:
    data = figure.data
    groups = list(dict.fromkeys(data["group"]))
    scene = Scene(WIDTH, (0.75 + 1.6 * len(groups)) * INCH)
    span = (float(data["from"].min()), float(data["to"].max()))
    tall = (0.0, 1.08 * float(data["share_percent"].max()))
    axis = wrapped(figure.axis, 70, 2)
    for at, group in enumerate(groups):
        last = at == len(groups) - 1
        made = axes(
            scene, span, tall, axis if last else "", "Share of deals (%)",
            top=8 + 1.6 * INCH * at,
            bottom=0 if last else 1.6 * INCH * (at + 1),
            left=56, marked=(last, True),
        )  # fmt: skip
        bars = data[data["group"] == group]
        edges = zip(bars["from"], bars["to"], bars["share_percent"], strict=True)
        for low, high, share in edges:
            if share > 0:
                made.bar((low, high), (0.0, share), SERIES[at % 4], 0.55,
                         hatched=at % 2 == 1, outline=True)  # fmt: skip
        if span[0] <= 0 <= span[1]:
            made.upright(0.0)
        made.upright(figure.marks[f"median: {group}"], "ink", 1.4, DASHES)
        words = f"{wrapped(str(group), 60, 2)}\n{figure.beside.get(str(group), '')}"
        scene.block((made.right, made.top + 8), words, tone=SERIES[at % 4], anchor="end")
    return scene


def _intervals(figure: Figure) -> Scene:
    data = figure.data.reset_index(drop=True)
    if len(data) > LABELLED:
        return _crowded(figure, data)
    names = [_label(row) for _, row in data.iterrows()]
    deepest = max((name.count("\n") for name in names), default=0)
    scene = Scene(WIDTH, (0.75 + (0.34 + 0.16 * deepest) * len(data)) * INCH)
    made = rows(scene, _span(data), names, wrapped(figure.axis, 70, 2), size=SIZE)
    _interval_rows(made, figure, data, width=1.8, size=6.5)
    return scene


def _crowded(figure: Figure, data: pd.DataFrame) -> Scene:
    """Too many to name: in order of size, in a picture of fixed height."""
    data = data.sort_values("estimate", ascending=False, ignore_index=True)
    scene = Scene(WIDTH, 7.0 * INCH)
    made = axes(
        scene, _span(data), (-len(data) + 0.4, 0.6), wrapped(figure.axis, 70, 2),
        "Variants in order of size; names in the table", marked=(True, False),
    )  # fmt: skip
    _interval_rows(made, figure, data, width=1.0, size=3.5)
    return scene


def _interval_rows(
    made: Axes, figure: Figure, data: pd.DataFrame, *, width: float, size: float
) -> None:
    made.upright(0.0)
    if "estimate" in figure.marks:
        made.upright(figure.marks["estimate"], "ink", 0.9, DASHES)
    for at, (_, row) in enumerate(data.iterrows()):
        y = -float(at)
        for low, high in _segments(row, *made.x):
            made.line((low, high), (y, y), SERIES[0], width)
            for end, edge, shape in ((low, made.x[0], "left"), (high, made.x[1], "right")):
                if end == edge:
                    made.dots([end], [y], SERIES[0], shape, 6)
        lead = bool(row["lead"])
        made.dots([row["estimate"]], [y], SERIES[1] if lead else SERIES[0],
                  MARKERS[1] if lead else MARKERS[0], size, filled=lead)  # fmt: skip
        if row["shape"] == "empty":
            x, level = made.at(float(row["estimate"]), y)
            made.scene.block((x + 8, level), "empty set", size=SMALL, middle=True)


def _label(row: pd.Series[Any]) -> str:
    parts = (clean(str(row["dimension"])), clean(str(row["label"])))
    return wrapped(": ".join(part for part in parts if part), 38, 3)


def _span(data: pd.DataFrame) -> tuple[float, float]:
    """The span of the axis: all estimates and ends, odd ends far away left to arrows."""
    every = data[["estimate", "low", "high"]].to_numpy(dtype=np.float64).ravel()
    found = np.append(every[np.isfinite(every)], 0.0)
    middle = data["estimate"].to_numpy(dtype=np.float64)
    bounded = data[data["shape"] == "interval"]
    spread = float((bounded["high"] - bounded["low"]).max()) if len(bounded) else 1.0
    low = max(found.min(), middle.min() - 3 * spread)
    high = min(found.max(), middle.max() + 3 * spread)
    low, high = min(low, 0.0), max(high, 0.0)
    margin = 0.06 * (high - low) or 1.0
    return low - margin, high + margin


def _segments(row: pd.Series[Any], left: float, right: float) -> list[tuple[float, float]]:
    """What of the axis the set covers, cut at the axis's ends."""
    low, high = float(row["low"]), float(row["high"])
    spans = {
        "interval": [(low, high)],
        "two rays": [(left, low), (high, right)],
        "the whole line": [(left, right)],
        "empty": [],
    }[str(row["shape"])]
    cut = [(max(a, left), min(b, right)) for a, b in spans]
    return [(a, b) for a, b in cut if a <= b]


DRAWINGS: Mapping[str, Callable[[Figure], Scene]] = {
    "path": _path,
    "distribution": _distribution,
    "intervals": _intervals,
    "curve": _curve,
    "profile": _profile,
    "choices": _choices,
}
