"""What all drawings share: colours, lines, markers, ticks and wrapped words."""

from __future__ import annotations

import textwrap
from collections.abc import Callable
from typing import TYPE_CHECKING

import matplotlib as mpl
import pandas as pd

from pipeline.report.document import Figure
from pipeline.report.numerals import clean, show

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure as Canvas

# Blue and vermilion of the Okabe-Ito palette: apart for every kind of colour vision, and of
# different lightness.
COLOURS = ("#0072b2", "#d55e00", "#333333", "#009e73")
LINES = ("-", (0, (6, 2)), (0, (2, 1.5)), "-.")
MARKERS = ("o", "s", "^", "D")
INK, FAINT, STRIP = "#222222", "#8a8a8a", "#ececec"

Drawing = tuple[Callable[[pd.DataFrame], float], "Callable[[Canvas, Figure], None]"]
"""Inches of height for the data, and what draws them."""


def wrapped(text: str, width: int, lines: int) -> str:
    """``text`` on at most ``lines`` lines, an ellipsis where it was cut."""
    return "\n".join(textwrap.wrap(clean(text), width, max_lines=lines, placeholder=" …"))


def ticks(axes: Axes, *, y: bool = True) -> None:
    """Tick labels with thousands separated and a true minus sign."""
    for axis in (axes.xaxis, axes.yaxis) if y else (axes.xaxis,):
        axis.set_major_locator(mpl.ticker.MaxNLocator(7, steps=[1, 2, 2.5, 5, 10]))
        axis.set_major_formatter(mpl.ticker.FuncFormatter(_tick))


def _tick(value: float, _: int | None) -> str:
    return show(value, 0 if float(value).is_integer() else 1)
