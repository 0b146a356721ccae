"""Drawing: figure values to SVG and PNG, the same bytes every time.

Groups differ by line, marker and colour at once, so that the pictures read in grey. Nothing of
the plotting library's global state is used.
"""

from __future__ import annotations

import io
import re
from collections.abc import Mapping
from dataclasses import replace
from functools import lru_cache
from html import escape
from typing import TYPE_CHECKING, Any

import matplotlib as mpl
import numpy as np
import pandas as pd
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.backends.backend_svg import FigureCanvasSVG
from matplotlib.figure import Figure as Canvas

from pipeline.report.document import Figure
from pipeline.report.doubt_drawings import DRAWINGS as DOUBTS
from pipeline.report.drawing import (
    COLOURS,
    FAINT,
    INK,
    LINES,
    MARKERS,
    STRIP,
    Drawing,
    ticks,
    wrapped,
)
from pipeline.report.numerals import clean

if TYPE_CHECKING:
    from matplotlib.axes import Axes

WIDTH = 7.2
LABELLED = 45
LIKELIHOOD_DROP = 1.92
"""Half the 95% point of χ²(1)."""
DEEPEST = 15.0
LINE = 15

STYLE: dict[Any, Any] = {
    "svg.hashsalt": "dealwake",
    "svg.fonttype": "none",
    "text.parse_math": False,
    "axes.unicode_minus": True,
    "font.family": "DejaVu Sans",
    "font.size": 9.5,
    "axes.edgecolor": FAINT,
    "axes.labelcolor": INK,
    "text.color": INK,
    "xtick.color": INK,
    "ytick.color": INK,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.linewidth": 0.8,
    "axes.facecolor": "none",
}


@lru_cache(maxsize=64)
def svg(figure: Figure) -> str:
    """The figure as an SVG document, without dates; text stays text. Drawn once a figure."""
    with mpl.rc_context(STYLE):
        canvas = _draw(figure)
        FigureCanvasSVG(canvas)
        buffer = io.StringIO()
        metadata: dict[str, Any] = dict.fromkeys(("Date", "Creator", "Format", "Type"))
        canvas.savefig(buffer, format="svg", metadata=metadata, facecolor="none")
    lines = (line.rstrip() for line in buffer.getvalue().splitlines())
    return "\n".join(lines) + "\n"


def titled_svg(figure: Figure) -> str:
    """The same drawing under its title, as a document that stands alone."""
    drawing = svg(figure)
    root = drawing[drawing.index("<svg") :]
    size = re.search(r'viewBox="0 0 ([\d.]+) ([\d.]+)"', root)
    if size is None:
        raise ValueError(f"the drawing of {figure.name} has no viewBox")
    width, height = float(size[1]), float(size[2])
    lines = wrapped(figure.title.text, 78, 4).split("\n")
    above = 10 + LINE * len(lines)
    total = height + above
    head = "".join(
        f'<text x="10" y="{6 + LINE * (at + 1):g}" font-family="DejaVu Sans, sans-serif" '
        f'font-size="11" font-weight="bold" fill="{INK}">{escape(line)}</text>\n'
        for at, line in enumerate(lines)
    )
    # Inside, the drawing is measured in the units of the whole, not in points of its own.
    inner = re.sub(r'(width|height)="([\d.]+)pt"', r'\1="\2"', root, count=2)
    inner = inner.replace("<svg", f'<svg y="{above:g}"', 1)
    return (
        f'<svg xmlns="http://www.w3.org/2000/svg" width="{width:g}pt" height="{total:g}pt" '
        f'viewBox="0 0 {width:g} {total:g}">\n{head}{inner}</svg>\n'
    )


def png(figure: Figure, *, dpi: int = 200) -> bytes:
    """The figure as a PNG picture, without its title, which the page prints as words."""
    with mpl.rc_context(STYLE):
        canvas = _draw(figure)
        FigureCanvasAgg(canvas)
        buffer = io.BytesIO()
        canvas.savefig(buffer, format="png", dpi=dpi, metadata={"Software": None})
    return buffer.getvalue()


def csv(data: pd.DataFrame) -> bytes:
    """The drawn data; words that a spreadsheet would run as a formula get an apostrophe."""

    def safe(value: object) -> object:
        risky = isinstance(value, str) and value.lstrip()[:1] in ("=", "+", "-", "@")
        return f"'{value}" if risky else value

    return data.map(safe).to_csv(index=False, lineterminator="\n").encode()


def _draw(figure: Figure) -> Canvas:
    height = DRAWINGS[figure.kind][0](_bare(figure))
    canvas = Canvas(figsize=(WIDTH, height), layout="constrained")
    DRAWINGS[figure.kind][1](canvas, replace(figure, data=_bare(figure)))
    return canvas


def _bare(figure: Figure) -> pd.DataFrame:
    """The data, its columns of amounts without the unit in their names."""
    return figure.data.rename(columns=lambda name: str(name).removesuffix(f"_{figure.unit}"))


def _path(canvas: Canvas, figure: Figure) -> None:
    axes = canvas.subplots()
    axes.axvspan(figure.marks["from"] - 0.5, figure.marks["to"] + 0.5, color=STRIP, lw=0)
    axes.axhline(0, color=FAINT, lw=0.8)
    axes.axvline(0, color=FAINT, lw=0.8, ls=(0, (1, 2)))
    ends = []
    for at, (group, path) in enumerate(figure.data.groupby("group", sort=False)):
        colour, marker = COLOURS[at % 4], MARKERS[at % 4]
        x, y = path["session"], path["mean"]
        axes.fill_between(x, path["low"], path["high"], color=colour, alpha=0.13, lw=0)
        if "low_path" in path:
            for edge in ("low_path", "high_path"):
                axes.plot(x, path[edge], color=colour, lw=0.7, ls=(0, (1, 2)))
        every = max(1, len(path) // 8)
        axes.plot(
            x, y, color=colour, ls=LINES[at % 4], lw=1.8, marker=marker, ms=4.5, markevery=every
        )
        ends.append((str(group), float(x.iloc[-1]), float(y.iloc[-1]), colour))
    axes.set_xlabel("Sessions from the announcement")
    axes.set_ylabel("Mean cumulative abnormal return (bp)")
    ticks(axes)
    axes.set_xlim(figure.data["session"].min() - 0.5, figure.data["session"].max() + 0.5)
    _end_labels(axes, ends)


def _curve(canvas: Canvas, figure: Figure) -> None:
    axes = canvas.subplots()
    x, y = figure.data["effect"], figure.data["power_percent"]
    axes.axhline(80, color=FAINT, lw=0.8, ls=(0, (1, 2)))
    axes.axvline(figure.marks["detectable"], color=FAINT, lw=0.8, ls=(0, (1, 2)))
    axes.plot(x, y, color=COLOURS[0], lw=1.8, marker=MARKERS[0], ms=4)
    axes.set_ylim(0, 103)
    axes.set_xlim(0, float(min(x.max(), 4 * figure.marks["detectable"])))
    axes.set_xlabel("True mean abnormal return (bp)")
    axes.set_ylabel("Chance that a test finds it (%)")
    ticks(axes)


def _profile(canvas: Canvas, figure: Figure) -> None:
    axes = canvas.subplots()
    data = figure.data
    axes.axhline(-LIKELIHOOD_DROP, color=FAINT, lw=0.8, ls=(0, (6, 2)))
    if "estimate" in figure.marks:
        axes.axvline(figure.marks["estimate"], color=COLOURS[1], lw=1.2, ls=(0, (4, 2)))
    axes.plot(data["rho"], data["log_likelihood"], color=COLOURS[0], lw=1.8, marker="o", ms=3)
    axes.set_xlim(-1, 1)
    axes.set_ylim(max(float(data["log_likelihood"].min()), -DEEPEST) - 0.5, 0.7)
    axes.set_xlabel("Correlation between announcing and return")
    axes.set_ylabel("Log-likelihood below the highest seen")
    ticks(axes)


def _choices_height(data: pd.DataFrame) -> float:
    return 2.6 + 0.17 * len(_choice_rows(data))


def _choice_rows(data: pd.DataFrame) -> list[tuple[str, str]]:
    """(column, choice) of every choice that some estimate makes and some does not."""
    columns = [name for name in data.columns if data[name].dtype == "object" or
               pd.api.types.is_string_dtype(data[name])]  # fmt: skip
    return [(name, str(choice)) for name in columns if data[name].nunique() > 1
            for choice in dict.fromkeys(sorted(data[name]))]  # fmt: skip


def _choices(canvas: Canvas, figure: Figure) -> None:
    data, rows = figure.data, _choice_rows(figure.data)
    above, below = canvas.subplots(2, 1, sharex=True, height_ratios=[2.2, 0.17 * len(rows) + 0.2])
    x = data["rank"]
    above.vlines(x, data["low"], data["high"], color=STRIP, lw=1.2)
    above.plot(x, data["estimate"], ls="none", marker="o", ms=2.2, color=COLOURS[0])
    above.axhline(0, color=FAINT, lw=0.8)
    at = figure.marks["headline"]
    if at:
        value = data["estimate"].iloc[int(at) - 1]
        above.plot([at], [value], marker="s", ms=6, color=COLOURS[1], ls="none")
    above.set_ylabel(figure.axis)
    ticks(above)
    for place, (name, choice) in enumerate(rows):
        made = x[data[name].astype(str) == choice]
        below.plot(made, np.full(len(made), place), ls="none", marker="|", ms=4, color=INK)
    below.set_yticks(range(len(rows)), [choice for _, choice in rows], fontsize=7.5)
    below.set_ylim(len(rows) - 0.5, -0.5)
    below.set_xlabel("Ways to make the estimate, sorted")
    ticks(below, y=False)


def _end_labels(axes: Axes, ends: list[tuple[str, float, float, str]]) -> None:
    """Name the lines at their ends, pushed apart where they would meet."""
    low, high = axes.get_ylim()
    texts = [wrapped(name, 18, 3) for name, *_ in ends]
    heights = [(high - low) * 0.055 * (text.count("\n") + 1) for text in texts]
    order = sorted(range(len(ends)), key=lambda i: ends[i][2])
    places: dict[int, float] = {}
    for before, at in zip([None, *order], order, strict=False):
        y = ends[at][2]
        if before is not None:
            y = max(y, places[before] + (heights[before] + heights[at]) / 2)
        places[at] = y
    for at, (_, x, _, colour) in enumerate(ends):
        axes.annotate(texts[at], (x, places[at]), (7, 0), textcoords="offset points",
                      color=colour, va="center", annotation_clip=False)  # fmt: skip


def _distribution(canvas: Canvas, figure: Figure) -> None:
    groups = list(dict.fromkeys(figure.data["group"]))
    panels = canvas.subplots(len(groups), 1, sharex=True, sharey=True, squeeze=False)[:, 0]
    for at, (axes, group) in enumerate(zip(panels, groups, strict=True)):
        bars = figure.data[figure.data["group"] == group]
        colour = COLOURS[at % 4]
        width = bars["to"] - bars["from"]
        axes.bar(bars["from"], bars["share_percent"], width, align="edge", color=colour,
                 alpha=0.55, edgecolor="white", lw=0.6, hatch="" if at == 0 else "///")  # fmt: skip
        if figure.data["from"].min() <= 0 <= figure.data["to"].max():
            axes.axvline(0, color=FAINT, lw=0.8)
        median = figure.marks[f"median: {group}"]
        axes.axvline(median, color=INK, lw=1.4, ls=(0, (4, 2)))
        words = f"{wrapped(str(group), 60, 2)}\n{figure.beside.get(str(group), '')}"
        axes.text(0.99, 0.95, words, transform=axes.transAxes, ha="right", va="top", color=colour)
        axes.set_ylabel("Share of deals (%)")
        ticks(axes)
    panels[-1].set_xlabel(wrapped(figure.axis, 70, 2))


def _intervals(canvas: Canvas, figure: Figure) -> None:
    data = figure.data.reset_index(drop=True)
    crowded = len(data) > LABELLED
    if crowded:
        data = data.sort_values("estimate", ascending=False, ignore_index=True)
    axes = canvas.subplots()
    axes.axvline(0, color=FAINT, lw=0.8)
    if "estimate" in figure.marks:
        axes.axvline(figure.marks["estimate"], color=INK, lw=0.9, ls=(0, (4, 2)))
    left, right = _reach(data)
    for at, row in data.iterrows():
        _interval_row(axes, -float(str(at)), row, left, right, crowded)
    axes.set_xlim(left, right)
    axes.set_ylim(-len(data) + 0.4, 0.6)
    axes.set_yticks([] if crowded else [-float(i) for i in range(len(data))])
    axes.set_yticklabels([] if crowded else [_label(row) for _, row in data.iterrows()])
    axes.tick_params(axis="y", length=0, pad=10)
    axes.spines["left"].set_visible(False)
    axes.set_xlabel(wrapped(figure.axis, 70, 2))
    if crowded:
        axes.set_ylabel("Variants in order of size; names in the table")
    ticks(axes, y=False)


def _interval_height(data: pd.DataFrame) -> float:
    """Inches: room for each label, or a fixed picture where there are too many to name."""
    if len(data) > LABELLED:
        return 7.0
    deepest = max(_label(row).count("\n") for _, row in data.iterrows())
    return 1.0 + (0.34 + 0.16 * deepest) * len(data)


def _label(row: pd.Series[Any]) -> str:
    parts = (clean(str(row["dimension"])), clean(str(row["label"])))
    return wrapped(": ".join(part for part in parts if part), 38, 3)


def _reach(data: pd.DataFrame) -> tuple[float, float]:
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


def _interval_row(
    axes: Axes, y: float, row: pd.Series[Any], left: float, right: float, crowded: bool
) -> None:
    style: dict[str, Any] = {"color": COLOURS[0], "lw": 1.0 if crowded else 1.8}
    for low, high in _segments(row, left, right):
        axes.plot([low, high], [y, y], solid_capstyle="butt", **style)
        for end, edge, marker in ((low, left, "<"), (high, right, ">")):
            if end == edge:
                axes.plot([end], [y], marker=marker, ms=6, clip_on=False, color=COLOURS[0])
    face = COLOURS[1] if row["lead"] else "white"
    axes.plot([row["estimate"]], [y], marker="s" if row["lead"] else "o", mfc=face,
              mec=COLOURS[1] if row["lead"] else COLOURS[0], mew=1.4,
              ms=3.5 if crowded else 6.5, ls="")  # fmt: skip
    if row["shape"] == "empty":
        axes.annotate("empty set", (row["estimate"], y), (8, 0), textcoords="offset points",
                      va="center", fontsize=8.5)  # fmt: skip


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


DRAWINGS: Mapping[str, Drawing] = {
    "path": (lambda data: 4.0, _path),
    "distribution": (lambda data: 1.0 + 1.6 * data["group"].nunique(), _distribution),
    "intervals": (_interval_height, _intervals),
    "curve": (lambda data: 3.2, _curve),
    "profile": (lambda data: 3.2, _profile),
    "choices": (_choices_height, _choices),
    **DOUBTS,
}
