"""Measure how share prices react to announced deals.

The public face: ``Study`` (read with ``load_study``), and one function a command: ``draft``,
``check``, ``run``, ``deal``, ``power``, ``contrast_runs`` and ``explain``.
"""

from __future__ import annotations

import os
from typing import TYPE_CHECKING, Any

# One BLAS thread: another number of threads moves the last bit of a sum, and the same study must
# give the same bytes. It has to be said before numpy is first imported.
for _variable in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_variable, "1")

if TYPE_CHECKING:
    from pipeline.calls import check, contrast_runs, deal, draft, explain, power, run
    from pipeline.core.findings import InputProblem
    from pipeline.core.results import Results
    from pipeline.study.load import load_study
    from pipeline.study.schema import Study

__all__ = [
    "InputProblem",
    "Results",
    "Study",
    "check",
    "contrast_runs",
    "deal",
    "draft",
    "explain",
    "load_study",
    "power",
    "run",
]

_COMMANDS = ("check", "contrast_runs", "deal", "draft", "explain", "power", "run")
_HOMES = {
    "InputProblem": "pipeline.core.findings",
    "Results": "pipeline.core.results",
    "Study": "pipeline.study.schema",
    "load_study": "pipeline.study.load",
    **dict.fromkeys(_COMMANDS, "pipeline.calls"),
}


def __getattr__(name: str) -> Any:
    """Import a public name when it is first asked for, so that ``--help`` stays quick."""
    from importlib import import_module

    if name not in _HOMES:
        raise AttributeError(f"module 'pipeline' has no attribute {name!r}")
    return getattr(import_module(_HOMES[name]), name)
