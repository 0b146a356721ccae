"""Writing a run whole or not at all, and never over anything that is not a run."""

from __future__ import annotations

import errno
import hashlib
import os
import platform
import re
import secrets
import shutil
import time
from collections.abc import Mapping
from functools import cache
from pathlib import Path

from pipeline.core.disk import disk_refusal, exchanged
from pipeline.core.findings import InputProblem, problem

MARK = "manifest.json"
ATTEMPTS = 50
# Looks at a folder before it is refused, and the seconds between them.
LOOKS, PAUSE = 10, 0.01
# What a name says that another run took, or gave away, in the meantime.
OVERTAKEN = {errno.ENOENT, errno.ENOTEMPTY, errno.EEXIST}
A_DAY = 86_400
# Names under which this process is writing a folder now.
_writing: set[str] = set()


def refuse_foreign(folder: Path) -> None:
    """Refuse a target that is not free and not an earlier run.

    Raises:
        InputProblem: ``output_folder`` if the target is a file, a folder that holds other things
            than a run, or cannot be written.
    """
    reason = ""
    for _ in range(LOOKS):
        reason = _foreign(folder.resolve())
        if not reason:
            return
        time.sleep(PAUSE)
    raise _refusal(folder, reason)


def _foreign(target: Path) -> str:
    """Why a run may not take the name of ``target``; '' if it may.

    While another run puts its folder there this may see a part of one, and be wrong.
    """
    try:
        held = target.is_dir() and any(target.iterdir())
    except OSError:
        held = False
    if held and not (target / MARK).is_file():
        return "a folder that holds other files and is no earlier run"
    if target.exists() and not target.is_dir():
        return "a file of that name"
    above = next(parent for parent in target.parents if parent.exists())
    for place in (above, target):
        if place.exists() and not (place.is_dir() and os.access(place, os.W_OK)):
            return f"no right to write in {place}"
    return ""


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

    Everything is written beside the folder first and takes its name at the end, in one step where
    the system has it, so that a run killed at any moment leaves the last good one, or its own,
    whole. Of runs that write one folder at the same time, each is whole and the last one stays.
    What a killed run left behind is swept first; an earlier run that it had moved aside is put
    back.

    Raises:
        InputProblem: ``output_folder`` if ``folder`` is not free and no earlier run, or cannot be
            written, ``disk_full`` if there is no room.
    """
    refuse_foreign(folder)
    folder = folder.resolve()
    own = f".{folder.name}.{os.getpid()}.{_machine()}.{secrets.token_hex(4)}"
    fresh, old = folder.with_name(f"{own}.new"), folder.with_name(f"{own}.old")
    _writing.add(own)
    try:
        folder.parent.mkdir(parents=True, exist_ok=True)
        _sweep(folder)
        for name, content in files.items():
            path = fresh / name
            path.parent.mkdir(parents=True, exist_ok=True)
            path.write_bytes(content)
        _put(fresh, folder, old)
    except OSError as fault:
        needed = sum(len(content) for content in files.values())
        raise disk_refusal(fault, folder, needed) from fault
    finally:
        shutil.rmtree(fresh, ignore_errors=True)
        shutil.rmtree(old, ignore_errors=True)
        _writing.discard(own)


def _put(fresh: Path, folder: Path, old: Path) -> None:
    """Give the new folder its name, whatever other runs do to that name meanwhile."""
    for attempt in range(ATTEMPTS):
        try:
            if not folder.exists() or not exchanged(fresh, folder):
                _swap(folder, fresh, old)
            return
        except OSError as fault:
            if fault.errno not in OVERTAKEN or attempt == ATTEMPTS - 1:
                raise


def _swap(folder: Path, fresh: Path, old: Path) -> None:
    """Two steps in the place of one: between them nothing has the name."""
    if folder.exists():
        folder.rename(old)
    try:
        fresh.rename(folder)
    except OSError:
        if old.exists() and not folder.exists():
            old.rename(folder)
        else:
            shutil.rmtree(old, ignore_errors=True)
        raise


def _sweep(folder: Path) -> None:
    """Remove what killed runs left beside the folder; put back a run that one had moved aside.

    Whether a run of another machine is alive cannot be seen from here; its files are left for a
    day.
    """
    pattern = re.compile(
        rf"\.{re.escape(folder.name)}\.(\d+)(?:\.([0-9a-f]{{8}})\.[0-9a-f]{{8}})?\.(new|old)"
    )
    for path in sorted(folder.parent.iterdir()):
        match = pattern.fullmatch(path.name)
        if match is None or _at_work(int(match[1]), match[2], path):
            continue
        if match[3] == "old" and not folder.exists():
            path.rename(folder)
        else:
            shutil.rmtree(path, ignore_errors=True)


def _at_work(process: int, machine: str | None, path: Path) -> bool:
    """Whether the run that made ``path`` may still be writing it; for a day it may, if in doubt."""
    try:
        if time.time() - path.stat().st_ctime > A_DAY:
            return False
    except OSError:  # it is gone, so somebody is at work
        return True
    if machine not in (None, _machine()):
        return True
    if process == os.getpid():
        return path.stem in _writing
    return _alive(process)


@cache
def _machine() -> str:
    """Eight characters for this machine that do not tell its name."""
    return hashlib.sha256(platform.node().encode()).hexdigest()[:8]


def _alive(process: int) -> bool:
    if os.name == "nt":  # where asking would end it
        return True
    try:
        os.kill(process, 0)
    except ProcessLookupError:
        return False
    except OSError:
        return True
    return True
