"""The page in a real browser: its width, its console, its accessibility, its print."""

from __future__ import annotations

import html
import json
import re
import shutil
import subprocess
from collections.abc import Iterator
from pathlib import Path

import pytest
from lxml import etree

from pipeline.report.html import render
from tests.report.runs import full_run

BROWSER = shutil.which("chromium")
ROOT = Path(__file__).resolve().parents[2]
# axe-core, a kept library of accessibility rules, where `npm install axe-core` has put it.
AXE = ROOT / ".venv" / "node_modules" / "axe-core" / "axe.min.js"
QUIET = ("--headless", "--no-sandbox", "--disable-gpu", "--virtual-time-budget=4000")
MEASURE = """
<script>
window.addEventListener("load", () => parent.postMessage({
  width: document.documentElement.clientWidth,
  reach: document.documentElement.scrollWidth,
  tables: document.querySelectorAll("table").length}, "*"));
</script>
</body>
"""
FRAME = """<!DOCTYPE html><html><body>
<iframe src="page.html" style="width:{width}px;height:900px;border:0"></iframe>
<script>
window.addEventListener("message", e => document.body.setAttribute("data-found",
  JSON.stringify(e.data)));
</script></body></html>
"""
RULES = """
<script>AXE</script>
<script>
window.addEventListener("load", () => axe.run(document, {resultTypes: ["violations"]}).then(r =>
  document.body.setAttribute("data-found", JSON.stringify(
    r.violations.map(v => v.id + ": " + v.nodes.map(n => n.target).join(", "))))));
</script>
</body>
"""
pytestmark = pytest.mark.skipif(BROWSER is None, reason="needs the chromium browser")


@pytest.fixture(scope="module")
def page() -> str:
    return render(full_run())["report.html"].decode()


def browse(*arguments: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [str(BROWSER), *QUIET, *arguments], capture_output=True, text=True, check=True, timeout=120
    )


def found(path: Path, *arguments: str) -> object:
    """What the page's own script left on its body."""
    shown = browse(*arguments, "--dump-dom", path.as_uri()).stdout
    match = re.search(r'data-found="([^"]*)"', shown)
    assert match, "the page never finished"
    return json.loads(html.unescape(match[1]))


def with_script(page: str, script: str) -> str:
    """The page forbids scripts: its policy is lifted for the one that looks at it."""
    return re.sub(r"<meta[^>]*Content-Security-Policy[^>]*>", "", page).replace("</body>", script)


@pytest.mark.parametrize("width", [360, 768, 1440])
def test_the_page_fits_the_window(page: str, width: int, tmp_path: Path) -> None:
    """In a frame of that width: the browser's own window is never narrower than 500 pixels."""
    (tmp_path / "page.html").write_text(with_script(page, MEASURE), encoding="utf-8")
    (tmp_path / "frame.html").write_text(FRAME.format(width=width), encoding="utf-8")
    facts = found(tmp_path / "frame.html", "--window-size=1600,1000")
    assert isinstance(facts, dict)
    assert facts["tables"] > 3
    assert facts["width"] <= width
    assert facts["reach"] <= facts["width"], facts


def test_the_console_stays_silent(page: str, tmp_path: Path) -> None:
    path = tmp_path / "page.html"
    path.write_text(page, encoding="utf-8")
    told = browse("--enable-logging=stderr", "--dump-dom", path.as_uri()).stderr
    assert "CONSOLE" not in told, told
    loud = tmp_path / "loud.html"
    loud.write_text(page.replace("</main>", '<img src="gone.png" alt=""/></main>'))
    assert "CONSOLE" in browse("--enable-logging=stderr", "--dump-dom", loud.as_uri()).stderr


@pytest.mark.skipif(not AXE.is_file(), reason="needs axe-core from the npm registry")
@pytest.mark.parametrize("look", ["light", "dark"])
def test_no_accessibility_rule_is_broken(page: str, look: str, tmp_path: Path) -> None:
    """Rules of axe-core (WCAG 2 A and AA, and its best practices), in both looks."""
    script = RULES.replace("AXE", AXE.read_text(encoding="utf-8"))
    path = tmp_path / "page.html"
    path.write_text(with_script(page, script), encoding="utf-8")
    dark = ("--blink-settings=preferredColorScheme=0",) if look == "dark" else ()
    assert found(path, "--window-size=1280,900", *dark) == []


@pytest.mark.skipif(shutil.which("pdftotext") is None, reason="needs pdftotext")
def test_print_keeps_every_word_on_the_sheet(page: str, tmp_path: Path) -> None:
    path, printed, boxes = (tmp_path / name for name in ("page.html", "page.pdf", "boxes.xml"))
    path.write_text(page, encoding="utf-8")
    browse("--no-pdf-header-footer", f"--print-to-pdf={printed}", path.as_uri())
    subprocess.run(["pdftotext", "-bbox", str(printed), str(boxes)], check=True, timeout=60)
    sheets = list(sheets_of(boxes))
    assert len(sheets) > 3
    for width, words in sheets:
        assert words, "an empty sheet"
        assert max(right for right, _ in words) <= width, max(words)
    printed_words = " ".join(word for _, words in sheets for _, word in words)
    tree = etree.fromstring(page.split("\n", 1)[1].encode())
    for cell in tree.iter("{*}td"):
        for word in "".join(cell.itertext()).split():
            if re.fullmatch(r"−?[\d,.]+", word):
                assert word in printed_words


def sheets_of(boxes: Path) -> Iterator[tuple[float, list[tuple[float, str]]]]:
    """Width and (right edge, word) of each sheet."""
    tree = etree.parse(str(boxes), etree.XMLParser(recover=True))
    for sheet in tree.iter("{*}page"):
        words = [(float(w.get("xMax", "0")), w.text or "") for w in sheet.iter("{*}word")]
        yield float(sheet.get("width", "0")), words
