"""Every document of a run, by file name."""

from __future__ import annotations

from pipeline.core.results import Results


def documents(results: Results) -> dict[str, bytes]:
    """Relative file name -> bytes, of all formats; the same bytes for the same results."""
    from pipeline.report import docx, html, svg, tex, xlsx

    found: dict[str, bytes] = {}
    for renderer in (html, docx, xlsx, tex, svg):
        found |= renderer.render(results)
    return found
