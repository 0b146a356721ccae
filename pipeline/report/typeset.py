"""The typesetter: fonts and the one call of its library, the same bytes every time.

Words never become its commands: they arrive as JSON and are set as text.
"""

from __future__ import annotations

import json
from functools import cache
from importlib.resources import files
from typing import Any, Final

import typst

from pipeline.report.fonts import packed

# ISO 14289-1, for readers who use a screen reader; the library refuses what breaks it.
STANDARD: Final = "ua-1"
TEMPLATE = "paper.typ"
PICTURE = """\
#set page(width: {width}mm, height: {height}mm, margin: 0pt, fill: none)
#image(bytes(json(bytes(sys.inputs.data))), format: "svg", width: 100%, height: 100%)
"""


def typeset(content: dict[str, Any], *, borrow: bool = False) -> bytes:
    """The template filled with ``content``, as a PDF.

    ``borrow`` lets it take fonts of the machine for characters that the packed ones lack.
    """
    source = files("pipeline.report").joinpath(TEMPLATE).read_bytes()
    return _compiled(source, content, "pdf", borrow=borrow)


def drawn(svg: bytes, size: tuple[float, float], dpi: int) -> bytes:
    """An SVG as PNG, ``size`` in millimetres."""
    width, height = size
    source = PICTURE.format(width=f"{width:.3f}", height=f"{height:.3f}").encode()
    return _compiled(source, svg.decode("utf-8", "replace"), "png", ppi=float(dpi))


def _compiled(source: bytes, content: Any, form: Any, *, borrow: bool = False,
              ppi: float | None = None) -> bytes:  # fmt: skip
    found = typst.compile(
        source,
        format=form,
        ppi=ppi,
        font_paths=_fonts(borrow),
        pdf_standards=STANDARD if form == "pdf" else None,
        sys_inputs={"data": json.dumps(content, ensure_ascii=False)},
    )
    if not isinstance(found, bytes):
        raise TypeError("the typesetter wrote more than one file")
    return found


@cache
def _fonts(borrow: bool) -> typst.Fonts:
    """The fonts packed with the typesetter, and those packed with the plotting library."""
    return typst.Fonts(include_system_fonts=borrow, font_paths=[str(packed())])
