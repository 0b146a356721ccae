"""Drawings of the sample: when deals happened, how alike the groups are, what instruments move."""

from __future__ import annotations

from collections.abc import Callable, Mapping

from pipeline.report.document import Figure
from pipeline.report.scene import Scene

DRAWINGS: Mapping[str, Callable[[Figure], Scene]] = {}
