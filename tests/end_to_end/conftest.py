"""One run of the demo, shared by the tests of this folder."""

from __future__ import annotations

import subprocess
import sys
import time
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]


def dealwake(
    *arguments: str | Path, cwd: Path = ROOT, expect: int = 0
) -> subprocess.CompletedProcess[str]:
    """Run the command as a person would, in a process of its own."""
    done = subprocess.run(
        [sys.executable, "-m", "pipeline", *map(str, arguments)],
        cwd=ROOT if cwd == ROOT else cwd,
        env={**__import__("os").environ, "PYTHONPATH": str(ROOT)},
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == expect, done.stdout + done.stderr
    return done


@pytest.fixture(scope="session")
def demo(tmp_path_factory: pytest.TempPathFactory, worker_id: str) -> Path:
    """The folder of a finished run of the demo, made once for all workers."""
    base = tmp_path_factory.getbasetemp()
    folder = (base if worker_id == "master" else base.parent) / "demo_run" / "demo"
    finished = folder.parent / "finished"
    try:
        folder.parent.mkdir()
    except FileExistsError:
        while not finished.exists():
            time.sleep(0.2)
        assert finished.read_text() == "well", "another worker's run of the demo failed"
        return folder
    said = "badly"
    try:
        done = dealwake("run", ROOT / "configs" / "demo.toml", "--out", folder)
        (folder.parent / "stdout.txt").write_text(done.stdout)
        said = "well"
    finally:
        part = finished.with_suffix(".part")
        part.write_text(said)
        part.replace(finished)
    return folder
