"""Tasks for workers of other processes, which import no more than they need."""

from __future__ import annotations

import os
import signal
from pathlib import Path
from typing import Any


def thread_count(common: Any, at: int) -> tuple[int, float, int]:
    """The part, a sum of what is common to all, and the most BLAS threads of the process."""
    import threadpoolctl

    counts = [pool["num_threads"] for pool in threadpoolctl.threadpool_info()]
    return at, float(common.sum()), max(counts)


def ended_once(steps: Any, draws: int, seed: Any, mark: str) -> Any:
    """A block of replications, in whose middle the worker that is first to come is killed."""
    from pipeline.estimators import selection_bootstrap as boot

    made = boot._block(steps, draws, seed)
    try:
        Path(mark).touch(exist_ok=False)
    except FileExistsError:
        return made
    os.kill(os.getpid(), signal.SIGKILL)
    return made
