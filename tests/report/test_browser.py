"""The page in a real browser: nothing runs over its edge on a phone, a tablet or a desk."""

from __future__ import annotations

import re
import shutil
import subprocess
from pathlib import Path

import pytest

from pipeline.report.html import render
from tests.report.runs import full_run

BROWSER = shutil.which("chromium")
PROBE = """
<script>
window.addEventListener("load", () => {
  const root = document.documentElement;
  root.setAttribute("data-width", root.clientWidth);
  root.setAttribute("data-reach", root.scrollWidth);
  root.setAttribute("data-tables", document.querySelectorAll("table").length);
});
</script>
</body>
"""


@pytest.mark.skipif(BROWSER is None, reason="needs the chromium browser")
@pytest.mark.parametrize("width", [500, 768, 1440])
def test_the_page_fits_the_window(width: int, tmp_path: Path) -> None:
    """The browser's own narrowest window is 500 pixels wide."""
    page = render(full_run())["report.html"].decode()
    path = tmp_path / "page.html"
    # The page forbids scripts; the probe is one.
    open_page = re.sub(r"<meta[^>]*Content-Security-Policy[^>]*>", "", page)
    path.write_text(open_page.replace("</body>", PROBE), encoding="utf-8")
    shown = subprocess.run(
        [
            str(BROWSER),
            "--headless",
            "--no-sandbox",
            "--disable-gpu",
            f"--window-size={width},900",
            "--virtual-time-budget=2000",
            "--dump-dom",
            path.as_uri(),
        ],
        capture_output=True,
        text=True,
        check=True,
        timeout=120,
    ).stdout
    facts = {name: int(value) for name, value in re.findall(r'data-(\w+)="(\d+)"', shown)}
    assert facts["tables"] > 3
    assert facts["reach"] <= facts["width"], facts
