"""Drawings of the doubts: assumptions side by side, hidden factors, added error, violations."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from pipeline.report.document import Figure
from pipeline.report.drawing import (
    COLOURS,
    FAINT,
    INK,
    LINES,
    MARKERS,
    Drawing,
    ticks,
    wrapped,
)
from pipeline.report.numerals import show

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure as Canvas

LABELLED_POINTS = 3
ROW, LABEL = 0.4, 58


def _assumptions(canvas: Canvas, figure: Figure) -> None:
    data = figure.data.reset_index(drop=True)
    axes = canvas.subplots()
    left, right = _span(data)
    axes.axvline(0, color=FAINT, lw=0.8)
    for mark in ("lead", "other"):
        if mark in figure.marks:
            colour = COLOURS[1] if mark == "lead" else COLOURS[0]
            axes.axvline(figure.marks[mark], color=colour, lw=0.8, ls=(0, (4, 2)))
    for at, row in data.iterrows():
        _assumption(axes, -float(str(at)), row, left, right)
    axes.set_xlim(left, right)
    axes.set_ylim(-len(data) + 0.4, 0.6)
    axes.set_yticks([-float(i) for i in range(len(data))])
    axes.set_yticklabels([wrapped(str(text), LABEL, 2) for text in data["label"]], fontsize=8)
    axes.tick_params(axis="y", length=0, pad=8)
    axes.spines["left"].set_visible(False)
    axes.set_xlabel(wrapped(figure.axis, 70, 2))
    ticks(axes, y=False)


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


def _assumption(axes: Axes, y: float, row: pd.Series[Any], left: float, right: float) -> None:
    lead = bool(row["lead"])
    colour = COLOURS[1] if lead else COLOURS[0]
    low, high = (float(row[name]) for name in ("low", "high"))
    if not (np.isnan(low) or np.isnan(high)):
        cut = max(low, left), min(high, right)
        axes.plot(cut, [y, y], color=colour, lw=1.5, solid_capstyle="butt")
        for end, edge, marker in ((low, left, "<"), (high, right, ">")):
            if (end < edge) if marker == "<" else (end > edge):
                axes.plot([edge], [y], marker=marker, ms=5, clip_on=False, color=colour)
    reported = bool(row["reported"])
    axes.plot([row["estimate"]], [y], marker="s" if lead else "o", ls="", mec=colour, mew=1.3,
              mfc=colour if reported else "white", ms=6.5 if reported else 5)  # fmt: skip


def _hidden(canvas: Canvas, figure: Figure) -> None:
    data = figure.data
    grid = data[data["label"] == ""]
    x, y = np.unique(grid["with_treatment"]), np.unique(grid["with_outcome"])
    shape = (len(y), len(x))
    estimates = grid["estimate"].to_numpy(dtype=np.float64).reshape(shape)
    t = np.abs(grid["statistic"].to_numpy(dtype=np.float64)).reshape(shape)
    axes = canvas.subplots()
    shown = axes.contour(
        100 * x, 100 * y, estimates, levels=7, colors=FAINT, linewidths=0.9, linestyles="solid"
    )
    axes.clabel(shown, fmt=lambda value: show(value, 0), fontsize=8, colors=INK)
    axes.contour(100 * x, 100 * y, estimates, levels=[0.0], colors=COLOURS[1], linewidths=2.0)
    axes.contour(100 * x, 100 * y, t, levels=[figure.marks["reach"]], colors=COLOURS[0],
                 linewidths=1.6, linestyles=[LINES[1]])  # fmt: skip
    _points(axes, data[data["label"] != ""])
    axes.set_xlabel("Share of what is left of the feature that it explains (%)")
    axes.set_ylabel(wrapped(figure.axis, 45, 2))
    ticks(axes)


def _points(axes: Axes, points: pd.DataFrame) -> None:
    """The controls as points, the strongest few of them named."""
    size = points["with_treatment"] + points["with_outcome"]
    order = size.sort_values(ascending=False).index[:LABELLED_POINTS]
    axes.plot(100 * points["with_treatment"], 100 * points["with_outcome"], ls="", marker="D",
              ms=5, color=INK, clip_on=False)  # fmt: skip
    by_height = points.loc[order].sort_values("with_outcome", kind="stable").index
    for at, index in enumerate(by_height):
        place = (100 * points.loc[index, "with_treatment"], 100 * points.loc[index, "with_outcome"])
        axes.annotate(wrapped(str(points.loc[index, "label"]), 60, 1), place, (14, 8 + 13 * at),
                      textcoords="offset points", fontsize=8, color=INK,
                      arrowprops={"arrowstyle": "-", "color": FAINT, "lw": 0.6})  # fmt: skip


def _extrapolation(canvas: Canvas, figure: Figure) -> None:
    axes = canvas.subplots()
    axes.axvline(-1, color=FAINT, lw=0.8, ls=(0, (1, 2)))
    axes.axvline(0, color=FAINT, lw=0.8)
    for at, (name, line) in enumerate(figure.data.groupby("curve", sort=False)):
        style: dict[str, Any] = {"color": COLOURS[at % 4], "label": str(name)}
        if name == "simulated":
            axes.plot(line["zeta"], line["estimate"], ls="", marker="o", ms=6, **style)
        else:
            axes.plot(line["zeta"], line["estimate"], ls=LINES[at % 4], lw=1.5,
                      marker=MARKERS[at % 4], ms=5, markevery=[0], **style)  # fmt: skip
    axes.set_xlabel("Error added, over the error there is (at minus one there is none)")
    axes.set_ylabel(wrapped(figure.axis, 45, 2))
    axes.legend(frameon=False, fontsize=8.5)
    ticks(axes)


def _violations(canvas: Canvas, figure: Figure) -> None:
    axes = canvas.subplots()
    axes.axhline(0, color=FAINT, lw=0.8)
    for at, (kind, lines) in enumerate(figure.data.groupby("kind", sort=False)):
        style: dict[str, Any] = {"color": COLOURS[at % 4], "ls": LINES[at % 4], "lw": 1.6}
        for side in ("low", "high"):
            label = str(kind) if side == "low" else None
            axes.plot(100 * lines["share"], lines[side], label=label, **style)
    axes.set_xlabel("Share of the reduced form by which the instruments may act directly (%)")
    axes.set_ylabel(wrapped(figure.axis, 45, 2))
    axes.set_xlim(0, 100)
    axes.legend(frameon=False, fontsize=8.5, ncols=2, loc="upper left")
    ticks(axes)


DRAWINGS: Mapping[str, Drawing] = {
    "assumptions": (lambda data: 1.0 + ROW * len(data), _assumptions),
    "hidden": (lambda data: 4.4, _hidden),
    "extrapolation": (lambda data: 3.6, _extrapolation),
    "violations": (lambda data: 3.8, _violations),
}
