"""Seconds spent in each stage of a command, and who is told when one begins."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from typing import Protocol, runtime_checkable

Progress = Callable[[str], None]


@runtime_checkable
class Detailed(Protocol):
    """Whoever also wants to hear how much of a stage is done."""

    def portion(self, name: str, done: int, total: int) -> None:
        """``done`` of ``total`` parts of ``name`` are done."""


@dataclass(slots=True)
class Clock:
    """Seconds spent in each stage, and who is told when one begins."""

    progress: Progress
    seconds: dict[str, float] = field(default_factory=dict)

    @contextmanager
    def stage(self, name: str) -> Iterator[None]:
        """Time a stage, which may be done in several parts."""
        self.progress(name)
        begin = time.perf_counter()
        yield
        spent = self.seconds.get(name, 0.0) + time.perf_counter() - begin
        self.seconds[name] = round(spent, 3)

    def portion(self, name: str, done: int, total: int) -> None:
        """Tell how much of something long is done."""
        if isinstance(self.progress, Detailed):
            self.progress.portion(name, done, total)
