"""Seconds spent in each stage of a command, and who is told when one begins."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field

Progress = Callable[[str], None]


@dataclass(slots=True)
class Clock:
    """Seconds spent in each stage, and who is told when one begins."""

    progress: Progress
    seconds: dict[str, float] = field(default_factory=dict)

    @contextmanager
    def stage(self, name: str) -> Iterator[None]:
        """Time a stage."""
        self.progress(name)
        begin = time.perf_counter()
        yield
        self.seconds[name] = round(time.perf_counter() - begin, 3)
