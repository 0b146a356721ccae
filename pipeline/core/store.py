"""Writing a run whole or not at all, and never over anything that is not a run."""

from __future__ import annotations

import os
import re
import shutil
from collections.abc import Mapping
from pathlib import Path

from pipeline.core.findings import InputProblem, problem

MARK = "manifest.json"


def refuse_foreign(folder: Path) -> None:
    """Refuse a target that is not free and not an earlier run.

    Raises:
        InputProblem: ``output_folder`` if the target is a file, a folder that holds other things
            than a run, or cannot be written.
    """
    target = folder.resolve()
    if target.is_dir() and any(target.iterdir()) and not (target / MARK).is_file():
        raise _refusal(folder, "a folder that holds other files and is no earlier run")
    if target.exists() and not target.is_dir():
        raise _refusal(folder, "a file of that name")
    above = next(parent for parent in target.parents if parent.exists())
    if not above.is_dir() or not os.access(above, os.W_OK):
        raise _refusal(folder, f"no right to write in {above}")


def _refusal(folder: Path, got: str) -> InputProblem:
    return problem(
        "output_folder",
        "command line",
        column="--out",
        got=f"{folder}: {got}",
        expected="a new folder, an empty one, or one that holds an earlier run",
        remedy="Name another folder.",
    )


def write_folder(folder: Path, files: Mapping[str, bytes]) -> None:
    """Write ``files`` (relative name -> content) as ``folder``, replacing an earlier run.

    Everything is written beside the folder first and moved into place at the end, so that a run
    killed half-way leaves the last good one as it was. What a killed run left behind is swept
    first, and an earlier run that it had moved aside is put back.

    Raises:
        InputProblem: if ``folder`` is not free and no earlier run, or cannot be written.
    """
    refuse_foreign(folder)
    folder = folder.resolve()
    fresh = folder.with_name(f".{folder.name}.{os.getpid()}.new")
    old = folder.with_name(f".{folder.name}.{os.getpid()}.old")
    try:
        folder.parent.mkdir(parents=True, exist_ok=True)
        _sweep(folder)
        for name, content in files.items():
            path = fresh / name
            path.parent.mkdir(parents=True, exist_ok=True)
            path.write_bytes(content)
        _swap(folder, fresh, old)
    except OSError as fault:
        raise _refusal(folder, f"{fault.strerror or fault}") from fault
    finally:
        shutil.rmtree(fresh, ignore_errors=True)
        shutil.rmtree(old, ignore_errors=True)


def _swap(folder: Path, fresh: Path, old: Path) -> None:
    if folder.exists():
        folder.rename(old)
    try:
        fresh.rename(folder)
    except OSError:
        if old.exists():
            old.rename(folder)
        raise


def _sweep(folder: Path) -> None:
    """Remove what killed runs left beside the folder; put back a run that one had moved aside."""
    pattern = re.compile(rf"\.{re.escape(folder.name)}\.(\d+)\.(new|old)")
    for path in sorted(folder.parent.iterdir()):
        match = pattern.fullmatch(path.name)
        if match is None or _alive(int(match[1])):
            continue
        if match[2] == "old" and not folder.exists():
            path.rename(folder)
        else:
            shutil.rmtree(path, ignore_errors=True)


def _alive(process: int) -> bool:
    try:
        os.kill(process, 0)
    except ProcessLookupError:
        return False
    except OSError:
        return True
    return True
