"""Pictures of figures: SVG, PNG and the numbers behind them, the same bytes every time."""

from __future__ import annotations

from collections.abc import Callable, Mapping
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
    bare = figure.data.rename(columns=lambda name: str(name).removesuffix(f"_{figure.unit}"))
    return DRAWINGS[figure.kind](replace(figure, data=bare))


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

    def safe(value: object) -> object:
        risky = isinstance(value, str) and value.lstrip()[:1] in ("=", "+", "-", "@")
        return f"'{value}" if risky else value

    return data.map(safe).to_csv(index=False, lineterminator="\n").encode()
