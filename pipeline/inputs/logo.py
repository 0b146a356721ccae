"""The house's logo: read, and refused where a page, a sheet or a printer could not show it."""

from __future__ import annotations

import io
import re
from pathlib import Path

from lxml import etree
from PIL import Image

from pipeline.core.findings import InputProblem, problem
from pipeline.core.house import JPEG, PNG, SVG, Logo

KINDS = {".png": PNG, ".jpg": JPEG, ".jpeg": JPEG, ".svg": SVG}
LARGEST = 2_000_000
MOST_PIXELS = 25_000_000
KEY = "papers.logo"
_LENGTH = re.compile(r"\s*([0-9.]+)\s*(px|pt|mm|cm|in|pc)?\s*")
_OUTSIDE = re.compile(r"url\(\s*['\"]?[^#'\"\s]")
_ACTIVE = {"script", "foreignObject", "iframe", "image", "animate", "set", "handler"}


def read_logo(path: Path) -> Logo:
    """The picture in ``path``, checked: its bytes are those of the file.

    Raises:
        InputProblem: ``missing_file`` without the file, ``unreadable_file`` if it is no PNG, JPEG
            or SVG, is too large, or is an SVG that does or fetches something.
    """
    kind = KINDS.get(path.suffix.lower(), "")
    if not kind:
        raise _refused(path, f"a file ending in '{path.suffix}'", "Name a picture of that kind.")
    if not path.is_file():
        raise problem(
            "missing_file",
            path.name,
            column=KEY,
            got=f"no file at {path}",
            expected="a logo ending in .png, .jpg, .jpeg or .svg",
            remedy="Correct the path, which counts from the study file that names it, or take "
            "papers.logo out.",
        )
    data = path.read_bytes()
    if len(data) > LARGEST:
        raise _refused(path, f"{len(data):,} bytes", "Save it smaller.")
    shape = _drawn_shape(path, data) if kind == SVG else _pixel_shape(path, data, kind)
    return Logo(data, kind, shape, f"Logo: {path.stem.replace('_', ' ')}")


def _refused(path: Path, got: str, remedy: str) -> InputProblem:
    return problem(
        "unreadable_file",
        path.name,
        column=KEY,
        got=got,
        expected=f"a PNG, JPEG or SVG picture of at most {LARGEST:,} bytes",
        remedy=remedy,
    )


def _pixel_shape(path: Path, data: bytes, kind: str) -> float:
    """Width over height of a PNG or JPEG; refused if it is damaged or another kind."""
    try:
        with Image.open(io.BytesIO(data), formats=[kind.upper()]) as picture:
            width, height = picture.size
            if width * height > MOST_PIXELS:
                raise _refused(path, f"{width:,} by {height:,} pixels", "Save it smaller.")
            picture.load()
    except (OSError, SyntaxError, ValueError, Image.DecompressionBombError) as fault:
        raise _refused(path, f"no {kind.upper()}: {fault}", "Save it again as one.") from None
    return width / height


def _drawn_shape(path: Path, data: bytes) -> float:
    """Width over height of an SVG; refused if it is none, or does or fetches something."""
    parser = etree.XMLParser(resolve_entities=False, no_network=True, huge_tree=False)
    try:
        root = etree.fromstring(data, parser)
    except etree.XMLSyntaxError as fault:
        raise _refused(path, f"no SVG: {fault}", "Save it again as one.") from None
    if etree.QName(root).localname != "svg":
        raise _refused(path, f"XML of another kind: {root.tag}", "Save it again as SVG.")
    active = _active(root)
    if active:
        raise _refused(path, active, "Save it as a plain drawing, its words as curves.")
    width, height = _size(root)
    if not (width > 0 and height > 0):
        raise _refused(path, "an SVG without a size", "Give it a viewBox, or width and height.")
    return width / height


def _active(root: etree._Element) -> str:
    """What the drawing would do beyond being drawn; empty for nothing."""
    if root.getroottree().docinfo.internalDTD is not None:
        return "an SVG with a document type of its own"
    for node in root.iter():
        if not isinstance(node.tag, str):
            continue
        name = etree.QName(node).localname
        if name in _ACTIVE:
            return f"an SVG with <{name}>"
        if name == "style" and re.search(r"@import|" + _OUTSIDE.pattern, node.text or ""):
            return "an SVG whose style leads outside it"
        for key, value in node.attrib.items():
            local = etree.QName(key).localname.lower()
            outside = local == "href" and not value.startswith("#")
            if local.startswith("on") or outside or _OUTSIDE.search(value):
                return f"an SVG whose {local} leads outside it"
    return ""


def _size(root: etree._Element) -> tuple[float, float]:
    box = (root.get("viewBox") or "").replace(",", " ").split()
    try:
        if len(box) == 4:
            return float(box[2]), float(box[3])
        found = [_LENGTH.fullmatch(root.get(name) or "") for name in ("width", "height")]
        width, height = (float(match[1]) if match else 0.0 for match in found)
    except ValueError:
        return 0.0, 0.0
    return width, height
