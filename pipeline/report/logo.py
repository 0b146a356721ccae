"""The house's logo in the documents."""

from __future__ import annotations

import base64

from pipeline.core.house import SVG, Logo

WIDEST, HIGHEST = 60.0, 14.0
DPI = 300
_MIME = {"png": "image/png", "jpeg": "image/jpeg", "svg": "image/svg+xml"}


def placed(logo: Logo) -> tuple[float, float]:
    """Width and height in millimetres at the top of a page."""
    height = min(HIGHEST, WIDEST / logo.shape)
    return height * logo.shape, height


def address(logo: Logo) -> str:
    """The picture as an address that holds it itself."""
    return f"data:{_MIME[logo.kind]};base64,{base64.b64encode(logo.data).decode()}"


def pixels(logo: Logo) -> bytes:
    """The picture as PNG or JPEG, for formats that know no drawings."""
    if logo.kind != SVG:
        return logo.data
    from pipeline.report.typeset import drawn

    return drawn(logo.data, placed(logo), DPI)
