"""The fonts that are packed with a library of ours, so that every machine sets the same picture."""

from __future__ import annotations

from functools import cache
from importlib.util import find_spec
from pathlib import Path

from fontTools.ttLib import TTFont


@cache
def packed() -> Path:
    """The folder that holds DejaVu Sans, as matplotlib ships it.

    Raises:
        FileNotFoundError: without that library.
    """
    home = find_spec("matplotlib")
    if home is None or home.origin is None:
        raise FileNotFoundError("matplotlib, whose fonts the papers are set in")
    return Path(home.origin).parent / "mpl-data" / "fonts" / "ttf"


@cache
def _shown() -> frozenset[str]:
    with TTFont(packed() / "DejaVuSans.ttf", lazy=True) as font:
        return frozenset(map(chr, font.getBestCmap()))


def lacking(text: str) -> str:
    """The characters of ``text`` that the packed fonts cannot show, each once."""
    return "".join(sorted({mark for mark in text if mark.isprintable()} - _shown()))
