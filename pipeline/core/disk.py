"""What a disk may refuse, in plain words, and two names exchanged in one step."""

from __future__ import annotations

import ctypes
import errno
import os
import shutil
import sys
from functools import cache
from pathlib import Path
from typing import Any

from pipeline.core.findings import InputProblem, problem

# No room on the disk, in the person's share of it, or for a file of that size.
FULL = {errno.ENOSPC, errno.EDQUOT, errno.EFBIG}
NO_RIGHT = {errno.EACCES, errno.EPERM, errno.EROFS, errno.EBUSY, errno.ETXTBSY}
AT_WORKING_FOLDER, EXCHANGE = -100, 2
MEGABYTE = 1e6


def disk_refusal(fault: OSError, place: Path, needed: int = 0, key: str = "--out") -> InputProblem:
    """What to tell the person of a fault met while writing at ``place``.

    Args:
        fault: the fault.
        place: the folder or file that was to be written.
        needed: bytes that it would take, 0 if that is not known.
        key: the option or key that names the place.

    Returns:
        ``disk_full`` or ``output_folder``.
    """
    if fault.errno in FULL:
        return _no_room(place, needed, key)
    said = fault.strerror or str(fault)
    if fault.errno in NO_RIGHT:
        said = f"no right to write there ({said})"
    return problem(
        "output_folder",
        "command line",
        column=key,
        got=f"{place}: {said}",
        expected="a place that can be written",
        remedy="Close files of it that are open in other programs, ask for the right to write "
        "there, or name another place. An earlier run in it is untouched.",
    )


def _no_room(place: Path, needed: int, key: str) -> InputProblem:
    free = f", {_free(place) / MEGABYTE:,.1f} MB are free" if _free(place) >= 0 else ""
    wanted = f", {needed / MEGABYTE:,.1f} MB are needed" if needed else ""
    return problem(
        "disk_full",
        "command line",
        column=key,
        got=f"no room left for {place}{wanted}{free}",
        expected="room for all files at once, beside those of an earlier run",
        remedy="Free some room, or name a place on another disk; then run again. An earlier run "
        "there is untouched, and nothing half-written was left.",
    )


def _free(place: Path) -> int:
    """Bytes that are free where ``place`` is or would be; -1 if nobody says."""
    above = next((path for path in (place, *place.parents) if path.exists()), None)
    try:
        return shutil.disk_usage(above).free if above else -1
    except OSError:
        return -1


def write_file(place: Path, content: bytes, key: str) -> None:
    """Write one file whole or not at all.

    Raises:
        InputProblem: ``disk_full`` or ``output_folder``; a file that was there is untouched.
    """
    draft = place.with_name(f".{place.name}.{os.getpid()}.new")
    try:
        place.parent.mkdir(parents=True, exist_ok=True)
        draft.write_bytes(content)
        draft.replace(place)
    except OSError as fault:
        raise disk_refusal(fault, place, len(content), key) from fault
    finally:
        draft.unlink(missing_ok=True)


def exchanged(one: Path, other: Path) -> bool:
    """Let two folders change names in one step, so that neither name is ever without a folder.

    Returns:
        Whether it was done; False where the system, or the kind of disk, knows no such step.

    Raises:
        OSError: if it knows it and refuses.
    """
    call = _exchange_call()
    if call is None:
        return False
    here = ctypes.c_int(AT_WORKING_FOLDER)
    if call(here, os.fsencode(one), here, os.fsencode(other), ctypes.c_uint(EXCHANGE)) == 0:
        return True
    fault = ctypes.get_errno()
    if fault in (errno.ENOSYS, errno.EINVAL, errno.ENOTSUP):
        return False
    raise OSError(fault, os.strerror(fault), str(other))


@cache
def _exchange_call() -> Any:
    """The system's own call, renameat2(2) of Linux; None elsewhere."""
    if sys.platform != "linux":
        return None
    try:
        return ctypes.CDLL(None, use_errno=True).renameat2
    except (OSError, AttributeError):
        return None
