"""From results to a folder: documents, data and manifest, written whole or not at all."""

from __future__ import annotations

import hashlib
import json
import platform
from collections.abc import Mapping
from importlib.metadata import version
from pathlib import Path

from pipeline.core.clock import Clock
from pipeline.core.parquet import parquet_bytes
from pipeline.core.results import Results
from pipeline.core.store import write_folder
from pipeline.registry import FORMATS, entry
from pipeline.study import plan
from pipeline.study.schema import Study

PACKAGES = ("dealwake", "numpy", "pandas", "scipy", "statsmodels", "pandas-market-calendars")


def save(
    study: Study, results: Results, seconds: Mapping[str, float], folder: Path, clock: Clock
) -> list[str]:
    """Write documents, data and manifest to ``folder``, whole or not at all.

    Returns:
        The names of the files written.
    """
    files: dict[str, bytes] = {}
    with clock.stage("documents"):
        for key in study.report.formats:
            files.update(entry(FORMATS, key).load()(results))
        for name, frame in results.tables.items():
            files[f"data/{name}.parquet"] = parquet_bytes(frame)
    files["manifest.json"] = _manifest(study, {**seconds, **clock.seconds})
    write_folder(folder, files)
    return sorted(files)


def _manifest(study: Study, seconds: Mapping[str, float]) -> bytes:
    inputs = {
        name: {"file": source.path.name, "sha256": _digest(source.path)}
        for name, source in plan.sources(study).items()
    }
    content = {
        "study": study.model_dump(mode="json", by_alias=True, exclude={"inputs"}),
        "inputs": inputs,
        "packages": {name: version(name) for name in PACKAGES},
        "python": platform.python_version(),
        "seed": study.seed,
        "seconds": dict(seconds),
    }
    return (json.dumps(content, indent=2, ensure_ascii=False) + "\n").encode()


def _digest(path: Path) -> str:
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()
