"""How far a command is: the stages, what is long within one, and about how long it will take."""

from __future__ import annotations

import json
import time
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any, Protocol

if TYPE_CHECKING:
    from rich.progress import Progress, TaskID

# Seconds of the stages of the demo, for the shares of a run that has no earlier one.
TYPICAL: Mapping[str, float] = {
    "inputs": 2.1, "sessions and prices": 1.1, "abnormal returns": 0.2, "tests": 0.6,
    "placebo dates": 0.9, "characteristics": 0.1, "estimators": 0.1, "scrutiny": 1.7,
    "specification curve": 0.2, "results": 0.1, "who announces": 0.3, "documents": 3.3,
}  # fmt: skip


class Told(Protocol):
    """Who is told which stage begins, and what an earlier run took."""

    def __call__(self, stage: str) -> None:
        """A stage begins."""

    def expect(self, seconds: Mapping[str, float]) -> None:
        """Seconds a stage took in an earlier run; empty without one."""


class Silent:
    """Hears everything and says nothing."""

    def __call__(self, stage: str) -> None:
        pass

    def expect(self, seconds: Mapping[str, float]) -> None:
        pass


class Pace:
    """How long the stages that are left will take, by an earlier run or by what is usual.

    The usual shares are scaled by what the finished stages took, so that nothing is said before
    the first is finished.

    Args:
        now: a clock that counts seconds.
    """

    def __init__(self, now: Callable[[], float] = time.monotonic):
        self.now = now
        self.expected: Mapping[str, float] = TYPICAL
        self.known = False
        self.spent: dict[str, float] = {}
        self.stage, self.begun = "", now()

    def expect(self, seconds: Mapping[str, float]) -> None:
        """Take the stages of an earlier run as the measure; nothing changes without one."""
        if seconds:
            self.expected, self.known = seconds, True

    def begin(self, stage: str) -> None:
        """A stage begins, and the one before it is finished."""
        if self.stage:
            self.spent[self.stage] = self.now() - self.begun
        self.stage, self.begun = stage, self.now()

    def left(self) -> float | None:
        """Seconds left; None while nobody can tell."""
        done = [name for name in self.spent if name in self.expected]
        before = sum(self.expected[name] for name in done)
        if not before and not self.known:
            return None
        scale = sum(self.spent[name] for name in done) / before if before else 1.0
        waiting = [name for name in self.expected if name not in (*self.spent, self.stage)]
        rest = scale * sum(self.expected[name] for name in waiting)
        current = scale * self.expected.get(self.stage, 0.0) - (self.now() - self.begun)
        return rest + max(current, 0.0)

    def words(self) -> str:
        """``about 12 s left``, or nothing while nobody can tell."""
        seconds = self.left()
        if seconds is None:
            return ""
        if seconds < 90:
            return f"about {max(seconds, 1):.0f} s left"
        return f"about {seconds / 60:.0f} min left"


class Bars:
    """Moves the bar of the stages, and one for what is long within a stage."""

    def __init__(self, bar: Progress, stages: TaskID, pace: Pace):
        self.bar, self.stages, self.pace = bar, stages, pace
        self.begun: dict[str, tuple[TaskID, float]] = {}

    def __call__(self, stage: str) -> None:
        self.pace.begin(stage)
        self.bar.update(self.stages, description=stage, advance=1)

    def expect(self, seconds: Mapping[str, float]) -> None:
        """See :class:`Told`."""
        self.pace.expect(seconds)
        self.bar.update(self.stages, total=len(self.pace.expected))

    def portion(self, name: str, done: int, total: int) -> None:
        """How much of ``name`` is done."""
        if name not in self.begun:
            task = self.bar.add_task(name, total=total)
            self.begun[name] = (task, time.monotonic())
        task, begin = self.begun[name]
        seconds = (time.monotonic() - begin) * (total - done) / done if done else 0.0
        words = f"{done:,} of {total:,}, about {seconds:.0f} s left"
        self.bar.update(task, completed=done, left=words, visible=done < total)


@contextmanager
def bars() -> Iterator[Told]:
    """A bar over the stages with the time left, on standard error."""
    from rich.console import Console
    from rich.progress import BarColumn, Progress, ProgressColumn, TextColumn, TimeElapsedColumn
    from rich.text import Text

    pace = Pace()

    class Left(ProgressColumn):
        def render(self, task: Any) -> Text:
            return Text(task.fields.get("left") or pace.words())

    bar = Progress(
        TextColumn("{task.description:<22}"),
        BarColumn(bar_width=30),
        TimeElapsedColumn(),
        Left(),
        console=Console(stderr=True),
        transient=True,
    )
    with bar:
        yield Bars(bar, bar.add_task("study file", total=len(TYPICAL)), pace)


def earlier_seconds(folder: Path) -> dict[str, float]:
    """What each stage of the run that ``folder`` holds took; empty if it holds none."""
    try:
        content = json.loads((folder / "manifest.json").read_text(encoding="utf-8"))
        return {str(name): float(took) for name, took in content["seconds"].items()}
    except (OSError, ValueError, KeyError, AttributeError, TypeError):
        return {}
