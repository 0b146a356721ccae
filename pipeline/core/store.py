"""Writing a run whole or not at all."""

from __future__ import annotations

import os
import shutil
from collections.abc import Mapping
from pathlib import Path


def write_folder(folder: Path, files: Mapping[str, bytes]) -> None:
    """Write ``files`` (relative name -> content) as ``folder``, replacing an earlier run.

    Everything is written beside the folder first and moved into place at the end, so that a run
    killed half-way leaves the last good one as it was.

    Raises:
        OSError: if the folder cannot be written; the earlier run is untouched.
    """
    folder.parent.mkdir(parents=True, exist_ok=True)
    fresh = folder.with_name(f".{folder.name}.{os.getpid()}.new")
    old = folder.with_name(f".{folder.name}.{os.getpid()}.old")
    shutil.rmtree(fresh, ignore_errors=True)
    try:
        for name, content in files.items():
            path = fresh / name
            path.parent.mkdir(parents=True, exist_ok=True)
            path.write_bytes(content)
        if folder.exists():
            folder.rename(old)
        try:
            fresh.rename(folder)
        except OSError:
            if old.exists():
                old.rename(folder)
            raise
    finally:
        shutil.rmtree(fresh, ignore_errors=True)
        shutil.rmtree(old, ignore_errors=True)
