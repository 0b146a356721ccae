"""From results to a folder: documents, data and manifest, written whole or not at all."""

from __future__ import annotations

import hashlib
import json
import os
import platform
from collections.abc import Mapping
from importlib.metadata import version
from pathlib import Path
from typing import Any

from pipeline.core.clock import Clock
from pipeline.core.contrast import Contrast
from pipeline.core.parquet import parquet_bytes
from pipeline.core.results import Results
from pipeline.core.store import write_folder
from pipeline.inputs.source import POSTGRES, Source
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
    files["manifest.json"] = _manifest(study, folder, {**seconds, **clock.seconds}, results.digests)
    write_folder(folder, files)
    return sorted(files)


def save_contrast(found: Contrast, folder: Path) -> list[str]:
    """Write the comparison of two runs: page, memo, workbook and the frames behind them.

    Returns:
        The names of the files written.
    """
    from pipeline.report import contrast, docx, html, xlsx

    document = contrast.document(found)
    files = {
        "contrast.html": html.page(document).encode(),
        "contrast.docx": docx.file(document),
        "contrast.xlsx": xlsx.workbook(document),
    }
    for name, frame in contrast.frames(found).items():
        files[f"data/{name}.parquet"] = parquet_bytes(frame)
    files["manifest.json"] = (json.dumps({"runs": [found.first, found.second]}) + "\n").encode()
    write_folder(folder, files)
    return sorted(files)


def _manifest(
    study: Study, folder: Path, seconds: Mapping[str, float], digests: Mapping[str, str]
) -> bytes:
    paths = {name: path for name, path in study.inputs if isinstance(path, Path)}
    read = plan.sources(study)
    inputs = {
        name: _input(read[name], folder, digests) if name in read else _unread(path, folder)
        for name, path in paths.items()
    }
    logo = study.papers.logo
    kept_out: Any = {"inputs": set(paths), "papers": {"logo"}}
    content = {
        "study": study.model_dump(mode="json", by_alias=True, exclude=kept_out),
        "inputs": inputs,
        "logo": {"file": logo.name, "sha256": digests.get("logo", "")} if logo else {},
        "packages": {name: version(name) for name in PACKAGES},
        "python": platform.python_version(),
        "seed": study.seed,
        "seconds": dict(seconds),
    }
    return (json.dumps(content, indent=2, ensure_ascii=False) + "\n").encode()


def _input(source: Source, folder: Path, digests: Mapping[str, str]) -> dict[str, str]:
    """What was read: a file and its digest when the run began, or a query and its result's.

    A connection is no part of it.
    """
    if source.is_postgres:
        asked = source.query or f"table {source.relation}"
        return {
            "file": source.file,
            "path": POSTGRES.name,
            "query": asked,
            "sha256": digests.get(source.table, ""),
        }
    return {**_unread(source.path, folder), "sha256": digests.get(source.table, "")}


def _unread(path: Path, folder: Path) -> dict[str, str]:
    where = POSTGRES.name if path == POSTGRES else Path(os.path.relpath(path, folder)).as_posix()
    return {"file": path.name, "path": where, "sha256": ""}


def digest(path: Path) -> str:
    """SHA-256 of a file, hexadecimal."""
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()
