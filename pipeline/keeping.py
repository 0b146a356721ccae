"""What a rerun need not make again: results of long stages, kept by what they were made from.

A stage's result is kept under a digest of everything that decides it: the content of the files,
the part of the study that the stage reads, this package's own code and the libraries' versions.
What has changed therefore has another digest and is made afresh; nothing is ever looked up by name
or by time. Files are written beside their place and moved into it, so that runs at the same time
never see half of one.
"""

from __future__ import annotations

import hashlib
import os
import pickle
import platform
import secrets
import time
from collections.abc import Callable
from contextlib import suppress
from dataclasses import dataclass
from functools import cache
from importlib.metadata import version
from pathlib import Path
from typing import TypeVar

T = TypeVar("T")

# Environment variable that names another folder to keep things in.
FOLDER = "DEALWAKE_KEEP"
# What took less is made again sooner than it is read.
LEAST_SECONDS = 5.0
GIBIBYTE = 2**30
ENDING = ".kept"
LIBRARIES = ("numpy", "pandas", "scipy", "statsmodels", "pandas-market-calendars", "duckdb")


@dataclass(frozen=True, slots=True)
class Shelf:
    """Where results of stages are kept.

    Attributes:
        folder: the folder; made when first needed, for its owner alone.
        most: bytes that all kept results may take; those not used for longest go first. 0 keeps
            nothing.
        fresh: whether what is there is ignored; what is made is kept all the same.
    """

    folder: Path
    most: int
    fresh: bool = False

    def kept(self, key: str, make: Callable[[], T]) -> T:
        """What ``make`` returns, or returned when it was last called for the same ``key``.

        ``key`` must say everything that decides the result; '' keeps nothing.
        """
        if not key or not self.most:
            return make()
        path = self.folder / f"{hashlib.sha256(key.encode()).hexdigest()}{ENDING}"
        if not self.fresh:
            found = _read(path)
            if found is not None:
                return found[0]  # type: ignore[return-value]
        begin = time.perf_counter()
        made = make()
        if time.perf_counter() - begin >= LEAST_SECONDS:
            self._put(path, made)
        return made

    def _put(self, path: Path, made: object) -> None:
        """Keep a result, if there is room for it; a disk that refuses costs no more than time."""
        part = path.with_name(f"{path.name}.{secrets.token_hex(4)}.part")
        with suppress(OSError):
            self.folder.mkdir(parents=True, exist_ok=True, mode=0o700)
            with part.open("wb") as file:
                pickle.dump((made,), file, protocol=5)
            if part.stat().st_size <= self.most:
                part.replace(path)
            self._make_room(path)
        with suppress(OSError):
            part.unlink(missing_ok=True)

    def _make_room(self, newest: Path) -> None:
        """Remove what was not used for longest until the rest fits, and old unfinished files."""
        sizes = []
        for path in self.folder.iterdir():
            if path.name.endswith(".part") and time.time() - path.stat().st_mtime > 86_400:
                path.unlink(missing_ok=True)
            elif path.suffix == ENDING:
                facts = path.stat()
                sizes.append((path == newest, facts.st_mtime, facts.st_size, path))
        total = sum(size for _, _, size, _ in sizes)
        for _, _, size, path in sorted(sizes):
            if total <= self.most:
                break
            path.unlink(missing_ok=True)
            total -= size


def _read(path: Path) -> tuple[object] | None:
    """What a file holds, in a tuple; None if there is none, or none that can be read."""
    try:
        with path.open("rb") as file:
            found = pickle.load(file)
        os.utime(path)
    except OSError:
        return None
    except Exception:  # A damaged file can raise nearly anything; what it held is made again.
        with suppress(OSError):
            path.unlink()
        return None
    return found if isinstance(found, tuple) and len(found) == 1 else None


def shelf_for(gibibytes: float, fresh: bool) -> Shelf:
    """The user's own shelf: in the folder that ``DEALWAKE_KEEP`` names, or the usual one."""
    named = os.environ.get(FOLDER, "")
    return Shelf(Path(named) if named else _usual(), int(gibibytes * GIBIBYTE), fresh)


def _usual() -> Path:
    """The folder for files that may be made again, by the custom of the operating system."""
    if platform.system() == "Windows":
        base = os.environ.get("LOCALAPPDATA", "")
    elif platform.system() == "Darwin":
        base = str(Path.home() / "Library" / "Caches")
    else:
        base = os.environ.get("XDG_CACHE_HOME", "")
    return (Path(base) if base else Path.home() / ".cache") / "dealwake"


@cache
def code_digest() -> str:
    """A digest of this package's code, the interpreter and the libraries that make numbers."""
    found = hashlib.sha256(platform.python_version().encode())
    for name in LIBRARIES:
        found.update(f"{name} {version(name)} ".encode())
    for path in sorted(Path(__file__).parent.rglob("*.py")):
        found.update(path.read_bytes())
    return found.hexdigest()
