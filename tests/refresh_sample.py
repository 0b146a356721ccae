"""Make again what is committed and made from the code: the demo's sample, study files, snapshots.

``reports/sample/`` is the committed sample of the demo's documents; ``configs/every_key.toml`` and
``configs/study.schema.json`` say what a study file may hold; ``tests/report/snapshots/`` holds
every renderer's output for one document (:mod:`tests.report.refresh_snapshots`).

Run from the project's root after a change of the numbers or the documents:

    .venv/bin/python -m tests.refresh_sample

A browser (chromium) makes the picture that the README shows; without one the old picture stays.
"""

from __future__ import annotations

import re
import shutil
import subprocess
import sys
import tempfile
from pathlib import Path

from pipeline.study.describe import every_key, json_schema
from tests.report import refresh_snapshots

ROOT = Path(__file__).resolve().parents[1]
CONFIGS = ROOT / "configs"
SAMPLE = ROOT / "reports" / "sample"
DATA = ("estimates", "event_tests", "headline", "diagnostics", "sensitivity", "ledger", "findings")
DOCUMENTS = ("report.html", "memo.docx", "tables.xlsx")
PAGES = ("index", "D001", "D208")
"""Deals whose pages are kept; links to the others are taken out of the sample."""
PICTURE = "first_screen.png"


def main() -> None:
    """Write the study files, run the demo and keep the small part of it."""
    refresh_snapshots.main()
    (CONFIGS / "every_key.toml").write_text(every_key(), encoding="utf-8")
    (CONFIGS / "study.schema.json").write_text(json_schema(), encoding="utf-8")
    with tempfile.TemporaryDirectory() as base:
        out = Path(base) / "demo"
        command = [sys.executable, "-m", "pipeline", "run", "configs/demo.toml", "--out", str(out)]
        subprocess.run(command, cwd=ROOT, check=True)
        kept = SAMPLE / PICTURE
        picture = kept.read_bytes() if kept.exists() else b""
        shutil.rmtree(SAMPLE, ignore_errors=True)
        for folder in ("tables", "figures"):
            shutil.copytree(out / folder, SAMPLE / folder)
        for name in DOCUMENTS:
            shutil.copy(out / name, SAMPLE / name)
        (SAMPLE / "deals").mkdir()
        for page in PAGES:
            shutil.copy(out / "deals" / f"{page}.html", SAMPLE / "deals")
        for file in (SAMPLE / "report.html", *(SAMPLE / "deals").glob("*.html")):
            file.write_text(_unlinked(file.read_text(encoding="utf-8")), encoding="utf-8")
        (SAMPLE / "data").mkdir()
        for name in DATA:
            shutil.copy(out / "data" / f"{name}.parquet", SAMPLE / "data")
        if picture:
            kept.write_bytes(picture)
    _photograph()


def _unlinked(page: str) -> str:
    """A page whose links to deals that are not kept are plain words."""

    def kept(link: re.Match[str]) -> str:
        return link[0] if link[1] in PAGES else link[2]

    return re.sub(r'<a href="(?:deals/)?([\w-]+)\.html">(.*?)</a>', kept, page)


def _photograph() -> None:
    browser = shutil.which("chromium")
    if browser is None:
        return
    options = ["--headless", "--no-sandbox", "--disable-gpu", "--hide-scrollbars"]
    subprocess.run(
        [
            browser,
            *options,
            "--window-size=1100,1250",
            f"--screenshot={SAMPLE / PICTURE}",
            (SAMPLE / "report.html").as_uri(),
        ],
        check=True,
        capture_output=True,
    )


if __name__ == "__main__":
    main()
