"""Pictures of figures: SVG, PNG and the numbers behind them, the same bytes every time."""

from __future__ import annotations

import io
from collections.abc import Callable, Mapping
from csv import writer as table_writer
from dataclasses import replace
from functools import lru_cache

import pandas as pd

from pipeline.report import raster, vector
from pipeline.report.document import Figure
from pipeline.report.doubt_drawings import DRAWINGS as DOUBTS
from pipeline.report.drawings import DRAWINGS as RESULTS
from pipeline.report.sample_drawings import DRAWINGS as SAMPLES
from pipeline.report.scene import Scene, wrapped

DRAWINGS: Mapping[str, Callable[[Figure], Scene]] = {**RESULTS, **DOUBTS, **SAMPLES}
"""Kind of figure -> what draws it."""


@lru_cache(maxsize=64)
def scene(figure: Figure) -> Scene:
    """The figure as shapes; drawn once for all formats."""
    draw = DRAWINGS[figure.kind]
    if not figure.unit:
        return draw(figure)
    bare = figure.data.rename(columns=lambda name: str(name).removesuffix(f"_{figure.unit}"))
    return draw(replace(figure, data=bare))


@lru_cache(maxsize=64)
def svg(figure: Figure) -> str:
    """The figure as an SVG document; text stays text."""
    return vector.svg(scene(figure))


def titled_svg(figure: Figure) -> str:
    """The same drawing under its takeaway, as a document that stands alone."""
    lines = wrapped(figure.title.text, 78, 4).split("\n")
    return vector.svg(vector.titled(scene(figure), lines))


def png(figure: Figure, *, dpi: int = 200) -> bytes:
    """The figure as a PNG picture, without its title, which the page prints as words."""
    return raster.png(scene(figure), dpi)


def csv(data: pd.DataFrame) -> bytes:
    """The drawn data; words that a spreadsheet would run as a formula get an apostrophe."""
    buffer = io.StringIO()
    writer = table_writer(buffer, lineterminator="\n")
    writer.writerow(str(name) for name in data.columns)
    columns = (data[name].tolist() for name in data.columns)
    writer.writerows(map(_safe, row) for row in zip(*columns, strict=True))
    return buffer.getvalue().encode()


def _safe(value: object) -> object:
    if isinstance(value, str):
        return f"'{value}" if value.lstrip()[:1] in ("=", "+", "-", "@") else value
    return "" if value is pd.NA or value != value else value
