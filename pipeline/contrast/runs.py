"""A saved run read back from its folder."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pandas as pd

from pipeline.core.contrast import SavedRun
from pipeline.core.findings import problem
from pipeline.core.store import MARK

FRAMES = ("headline", "deals", "ledger", "estimates")


def read_run(folder: Path) -> SavedRun:
    """The run that ``folder`` holds.

    Raises:
        InputProblem: ``no_run`` if the folder holds none, or one that cannot be read.
    """
    target = folder.resolve()
    try:
        content: dict[str, Any] = json.loads((target / MARK).read_text(encoding="utf-8"))
        numbers, deals, ledger, columns = (
            pd.read_parquet(target / "data" / f"{name}.parquet") for name in FRAMES
        )
        return SavedRun(
            name=target.name,
            folder=target,
            study=content["study"],
            inputs=content["inputs"],
            versions={**content["packages"], "python": content["python"]},
            numbers=numbers,
            deals=deals,
            ledger=ledger,
            titles=dict(zip(columns["estimator"], columns["title"], strict=True)),
        )
    except (OSError, ValueError, KeyError) as fault:
        raise problem(
            "no_run",
            "command line",
            got=f"{folder}: {_told(fault)}",
            expected="a folder written by dealwake run, with its manifest and its data",
            remedy="Name the folder of a finished run, such as reports/demo.",
        ) from fault


def _told(fault: Exception) -> str:
    """What is wrong with a folder, in words."""
    if isinstance(fault, FileNotFoundError):
        return f"no file {Path(fault.filename).name} in it" if fault.filename else "a file missing"
    return str(fault)
