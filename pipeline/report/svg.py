"""Renderer of the figures: SVG files, each with its data beside it."""

from __future__ import annotations

from pipeline.core.results import Results
from pipeline.report.content import report
from pipeline.report.figures import csv, titled_svg


def render(results: Results) -> dict[str, bytes]:
    """``figures/<name>.svg`` with its title inside, and ``figures/<name>.csv``."""
    found: dict[str, bytes] = {}
    for figure in report(results).figures:
        found[f"figures/{figure.name}.svg"] = titled_svg(figure).encode()
        found[f"figures/{figure.name}.csv"] = csv(figure.data)
    return found
