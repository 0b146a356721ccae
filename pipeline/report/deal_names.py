"""Where the page of each deal stands, whatever its identifier holds."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping

from pipeline.report.document import Verbatim
from pipeline.report.material import Material
from pipeline.report.numerals import slug

FOLDER = "deals"
INDEX = "index"
LONGEST = 60
_SAFE = re.compile(rf"[A-Za-z0-9][A-Za-z0-9_-]{{0,{LONGEST - 1}}}")
_RESERVED = re.compile(r"con|prn|aux|nul|com\d|lpt\d|index", re.IGNORECASE)
"""Names that some systems keep for devices, and the list of all deals."""


def page_names(deals: Iterable[str]) -> Mapping[str, str]:
    """Deal -> the name of its page without folder and ending.

    An identifier of plain letters, digits, hyphens and underscores is its own name. Any other is
    spelled in those, with its place in the list behind it; so is one that differs from an earlier
    one by capitals alone, which some file systems take for the same.
    """
    found: dict[str, str] = {}
    taken: set[str] = set()
    for at, deal in enumerate(deals):
        plain = _SAFE.fullmatch(deal) and not _RESERVED.fullmatch(deal)
        name = deal if plain else f"{slug(deal)[:LONGEST]}-{at + 1}"
        while name.lower() in taken:
            name = f"{name}-{at + 1}"
        taken.add(name.lower())
        found[deal] = name
    return found


def page_path(name: str) -> str:
    """A page's file, from the folder of the report."""
    return f"{FOLDER}/{name}.html"


def page_links(material: Material) -> Mapping[str, str]:
    """Deal -> its page, from the folder of the report, for the deals that have one."""
    deals = material.results.deals["deal"].head(material.study.deal_pages).astype(str)
    return {deal: page_path(name) for deal, name in page_names(deals).items()}


def all_deals(material: Material) -> Verbatim | None:
    """Words that lead to the list of all deals; None if the run makes no pages."""
    if not material.study.deal_pages or material.results.deals.empty:
        return None
    every = len(material.results.deals) <= material.study.deal_pages
    words = "a page for each deal" if every else "a page for each of the deals listed first"
    return Verbatim(words, "report", page_path(INDEX))
