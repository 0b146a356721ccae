"""Runs that are killed: whether the last good one is whole afterwards, and a rerun clean.

Rerun from the project's root, with the project installed:

    .venv/bin/python -m tests.benchmarks.kills --kills 100

Two variants of a small study, told apart by their headline windows, are run by turns into one
folder, and each is killed (SIGKILL) at a random moment: every other one at any moment of its
length, the others within the moments in which it writes; every eighth is a process of its own,
which may be killed while it imports; half take nothing from earlier runs. The folder must then hold
one of the two variants whole, file by file, never none and never a mixture. A run that is not
killed must then leave nothing else beside it.

Writes ``tests/benchmarks/figures/kills.json``: kills by stage, folders found whole and by whose
run, leftovers met and swept. Needs a system with fork and kill.
"""

from __future__ import annotations

import argparse
import contextlib
import hashlib
import json
import os
import platform
import random
import select
import signal
import sys
import tempfile
import time
from collections import Counter
from dataclasses import dataclass, field
from pathlib import Path

from tests.small import LIGHT, write_small_study

FIGURES = Path(__file__).with_name("figures") / "kills.json"
SEED = 20_260
WINDOWS = ("[-1, 1]", "[0, 2]")
WRITING, ENDED = "writing", "ended"
FRESH_PROCESS = 8
CALIBRATIONS = 3


@dataclass(slots=True)
class Attempt:
    """What one run came to.

    Attributes:
        stages: (stage, seconds after the start) of each stage begun.
        length: seconds until it ended or was killed.
        status: its exit code, or minus the signal that ended it.
    """

    stages: list[tuple[str, float]]
    length: float
    status: int

    @property
    def last(self) -> str:
        """The stage it was in at its end."""
        return self.stages[-1][0] if self.stages else "starting"

    def began(self, stage: str) -> float:
        """Seconds after which a stage began; its length if it never did."""
        return next((when for name, when in self.stages if name == stage), self.length)


@dataclass(slots=True)
class Bench:
    """A folder with two variants of a study and the run that they take turns at.

    Attributes:
        home: the folder.
        light: whether the study is one that takes a part of a second.
        whole: variant -> relative name of each file -> digest; manifests by name alone.
    """

    home: Path
    light: bool = False
    whole: list[dict[str, str]] = field(default_factory=list)

    @property
    def out(self) -> Path:
        """The run's folder."""
        return self.home / "runs" / "out"

    def study(self, variant: int) -> Path:
        """The study file of a variant."""
        return self.home / f"study_{variant}.toml"

    def state(self) -> int | str:
        """The variant that the folder holds whole, or what is wrong with it."""
        if not self.out.is_dir():
            return "no folder"
        found = contents(self.out)
        for variant, files in enumerate(self.whole):
            if found == files:
                return variant
        return "a mixture"

    def leftovers(self) -> int:
        """How many other things stand beside the run."""
        return len([path for path in self.out.parent.iterdir() if path != self.out])


def contents(folder: Path) -> dict[str, str]:
    """Relative name -> digest of each file; of a manifest the study's window and its inputs."""
    found = {}
    for path in sorted(folder.rglob("*")):
        if path.is_file():
            content = path.read_bytes()
            if path.name == "manifest.json":
                said = json.loads(content)
                content = repr((said["study"]["event_time"]["headline"], said["inputs"])).encode()
            found[path.relative_to(folder).as_posix()] = hashlib.sha256(content).hexdigest()
    return found


def prepared(home: Path, light: bool = False) -> Bench:
    """Two variants of the small study, each run once to know what it leaves."""
    text = write_small_study(home).read_text()
    text = text + LIGHT if light else text.replace('["tex"]', '["html", "tex"]')
    bench = Bench(home, light)
    for variant, window in enumerate(WINDOWS):
        bench.study(variant).write_text(text.replace(WINDOWS[0], window).replace("Small", "Same"))
    for variant in (0, 1):
        done = attempt(bench, variant)
        if done.status:
            raise SystemExit(f"the study itself does not run: {done}")
        bench.whole.append(contents(bench.out))
    if bench.whole[0].keys() == bench.whole[1].keys() and bench.whole[0] == bench.whole[1]:
        raise SystemExit("the two variants cannot be told apart")
    return bench


def _work(study: Path, out: Path, tell: int, fresh: bool) -> None:
    """The command as a person runs it, telling a pipe which stage begins; never returns."""
    with (
        open(os.devnull, "w") as nowhere,
        contextlib.redirect_stdout(nowhere),
        contextlib.redirect_stderr(nowhere),
    ):
        status = _told(study, out, tell, fresh)
    os.write(tell, f"{ENDED}\n".encode())
    os._exit(status)


def _told(study: Path, out: Path, tell: int, fresh: bool) -> int:
    import pipeline.saving
    from pipeline import keeping
    from pipeline.cli import app
    from pipeline.core.clock import Clock

    keeping.LEAST_SECONDS = 0.0  # so that kept results are written, and killed at, too
    stage, write = Clock.stage, pipeline.saving.write_folder

    def told_stage(clock: Clock, name: str) -> object:
        os.write(tell, f"{name}\n".encode())
        return stage(clock, name)

    def told_write(folder: Path, files: dict[str, bytes]) -> None:
        os.write(tell, f"{WRITING}\n".encode())
        write(folder, files)

    Clock.stage = told_stage  # type: ignore[method-assign,assignment]
    pipeline.saving.write_folder = told_write  # type: ignore[assignment]
    try:
        app(["run", str(study), "--out", str(out), *["--fresh"] * fresh], standalone_mode=True)
    except SystemExit as end:
        return int(end.code or 0)
    return 0


def _start(bench: Bench, variant: int, own_process: bool, fresh: bool) -> tuple[int, int]:
    """The process of a new run, and the pipe on which it tells its stages."""
    told, tell = os.pipe()
    process = os.fork()
    if process:
        os.close(tell)
        return process, told
    try:
        os.environ["DEALWAKE_KEEP"] = str(bench.home / "kept")
        if own_process:
            os.set_inheritable(tell, True)
            order = [sys.executable, "-m", "tests.benchmarks.kills", "--work"]
            given = [str(bench.study(variant)), str(bench.out), str(tell), str(int(fresh))]
            os.execv(sys.executable, [*order, *given])
        _work(bench.study(variant), bench.out, tell, fresh)
    finally:
        os._exit(99)


def attempt(
    bench: Bench,
    variant: int,
    kill_after: float | None = None,
    after_stage: str = "",
    own_process: bool = False,
    fresh: bool = False,
) -> Attempt:
    """Run a variant; kill it so many seconds after its start, or after a stage began."""
    process, told = _start(bench, variant, own_process, fresh)
    start = time.perf_counter()
    deadline = start + kill_after if kill_after is not None and not after_stage else None
    stages: list[tuple[str, float]] = []
    while True:
        left = None if deadline is None else max(deadline - time.perf_counter(), 0.0)
        ready = select.select([told], [], [], left)[0]
        if not ready:
            os.kill(process, signal.SIGKILL)
            break
        said = os.read(told, 4096).decode().splitlines()
        now = time.perf_counter()
        if not said:
            break
        stages += [(name, now - start) for name in said]
        if after_stage in said and kill_after is not None and after_stage:
            deadline = now + kill_after
    status = os.waitpid(process, 0)[1]
    os.close(told)
    return Attempt(stages, time.perf_counter() - start, os.waitstatus_to_exitcode(status))


@dataclass(slots=True)
class Tally:
    """What was counted."""

    by_stage: Counter[str] = field(default_factory=Counter)
    found: Counter[str] = field(default_factory=Counter)
    ended_before: int = 0
    leftovers_met: int = 0
    leftovers_swept: int = 0
    leftovers_kept: int = 0
    reruns: Counter[str] = field(default_factory=Counter)


def kill_once(
    bench: Bench, number: int, stream: random.Random, usual: Attempt, tally: Tally
) -> None:
    """Kill one run, look at the folder, and let another run sweep what was left."""
    before = bench.state()
    other = 1 - before if isinstance(before, int) else 0
    alone, fresh = number % FRESH_PROCESS == 0 and not bench.light, number % 4 < 2
    if number % 2:
        length = 1.2 * (usual.began(ENDED) - usual.began(WRITING))
        done = attempt(bench, other, stream.uniform(0, length), WRITING, fresh=fresh)
    else:
        length = usual.began(ENDED) + (1.0 if alone else 0.0)
        done = attempt(bench, other, stream.uniform(0, length), own_process=alone, fresh=fresh)
    if done.status != -signal.SIGKILL:
        tally.ended_before += 1
    else:
        tally.by_stage[done.last] += 1
    after = bench.state()
    names = {before: "the run before, whole", other: "its own run, whole"}
    tally.found[names.get(after, str(after))] += 1
    left = bench.leftovers()
    tally.leftovers_met += left
    if left or not isinstance(after, int) or number % 10 == 9:
        again = attempt(bench, other)
        whole = bench.state() == other
        tally.reruns[f"exit {again.status}, {'whole' if whole else 'broken'}"] += 1
        tally.leftovers_kept += bench.leftovers()
        tally.leftovers_swept += left - bench.leftovers()


def kills(number: int, home: Path, seed: int = SEED, light: bool = False) -> Tally:
    """Kill so many runs; a run that ended before it could be killed is none of them.

    ``light`` runs a study that takes a part of a second, for the tests.
    """
    import pipeline.flow
    import pipeline.screen  # noqa: F401  (so that each forked run starts at once)

    bench, stream, tally = prepared(home, light), random.Random(seed), Tally()
    calibrated = [attempt(bench, at % 2) for at in range(1 if light else CALIBRATIONS)]
    usual = sorted(calibrated, key=lambda done: done.length)[len(calibrated) // 2]
    at = 0
    while sum(tally.by_stage.values()) < number:
        kill_once(bench, at, stream, usual, tally)
        at += 1
    return tally


def main() -> None:
    """Kill, count and write the figures."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--kills", type=int, default=100)
    parser.add_argument("--work", nargs=4, help=argparse.SUPPRESS)
    chosen = parser.parse_args()
    if chosen.work:
        study, out, tell, fresh = chosen.work
        _work(Path(study), Path(out), int(tell), fresh == "1")
    with tempfile.TemporaryDirectory() as folder:
        tally = kills(chosen.kills, Path(folder))
    figures = {
        "rerun": f"python -m tests.benchmarks.kills --kills {chosen.kills}",
        "python": platform.python_version(),
        "system": platform.system(),
        "kills": sum(tally.by_stage.values()),
        "kills_by_stage": dict(tally.by_stage.most_common()),
        "runs_that_ended_before_their_kill": tally.ended_before,
        "folder_found_after_a_kill": dict(tally.found),
        "leftovers_met": tally.leftovers_met,
        "leftovers_swept_by_the_next_run": tally.leftovers_swept,
        "leftovers_still_there": tally.leftovers_kept,
        "reruns": dict(tally.reruns),
    }
    FIGURES.write_text(json.dumps(figures, indent=2) + "\n")
    print(json.dumps(figures, indent=2))


if __name__ == "__main__":
    main()
