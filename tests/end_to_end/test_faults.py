"""What may happen to a run from outside: the last good one stays whole, and the message helps."""

from __future__ import annotations

import errno
import json
import os
import resource
import shutil
import signal
import subprocess
import tempfile
import threading
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest

from pipeline import keeping
from pipeline.core import disk, store
from pipeline.core.findings import InputProblem
from pipeline.flow import assembled, measured
from tests.benchmarks.kills import WINDOWS, contents, kills
from tests.end_to_end.test_bad_input import edit, invoke, plain
from tests.end_to_end.test_ready_table import bids, written
from tests.small import LIGHT, write_small_study

POSIX = pytest.mark.skipif(os.name != "posix", reason="needs fork and limits of a process")
OLD = {"a.txt": b"old", "data/b.txt": b"old", store.MARK: b"{}"}
NOBODY = 65_534


@pytest.fixture
def study(tmp_path: Path) -> Path:
    path = write_small_study(tmp_path / "mine")
    path.write_text(path.read_text() + LIGHT)
    return path


def before(function: Callable[..., Any], change: Callable[[], object]) -> Callable[..., Any]:
    """The function, with something happening outside just before it is called."""

    def called(*given: Any, **named: Any) -> Any:
        change()
        return function(*given, **named)

    return called


def after(function: Callable[..., Any], change: Callable[[], object]) -> Callable[..., Any]:
    def called(*given: Any, **named: Any) -> Any:
        made = function(*given, **named)
        change()
        return made

    return called


CHANGES: dict[str, Callable[[Path], object]] = {
    "a cell": lambda folder: edit("deals.csv", "D03", "D99")(folder),
    "half of it": lambda folder: os.truncate(folder / "deals.csv", 700),
    "gone": lambda folder: (folder / "deals.csv").unlink(),
}
MOMENTS = {
    "before it is read": (measured, "read_inputs", before),
    "when it was read": (measured, "read_inputs", after),
    "later in the run": (assembled, "results_of", after),
}


@pytest.mark.parametrize("moment", MOMENTS)
@pytest.mark.parametrize("change", CHANGES)
def test_a_table_that_changes_under_the_run(
    change: str, moment: str, study: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Whether it can still be read or not, it is said to have changed; nothing is kept."""
    monkeypatch.setenv(keeping.FOLDER, str(tmp_path / "kept"))
    monkeypatch.setattr(keeping, "LEAST_SECONDS", 0.0)
    store.write_folder(tmp_path / "out", OLD)
    room, name, place = MOMENTS[moment]
    changed = place(getattr(room, name), lambda: CHANGES[change](study.parent))
    monkeypatch.setattr(room, name, changed)
    code, text = invoke("run", study, "--out", tmp_path / "out", "--quiet")
    assert code == 2
    assert "[changed_file]" in text
    for part in ("deals.csv", "inputs.deals", "run again", "1 problem"):
        assert part in plain(text)
    assert (tmp_path / "out" / "a.txt").read_bytes() == b"old"
    if moment != "later in the run":
        assert not (tmp_path / "kept").exists()


def test_a_deal_list_with_its_outcome_that_changes(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    from pipeline.flow import ready

    path = written(tmp_path, bids())
    table = next(item for item in tmp_path.iterdir() if item != path)
    spoilt = after(ready.read_ready, lambda: os.truncate(table, table.stat().st_size - 5))
    monkeypatch.setattr(ready, "read_ready", spoilt)
    code, text = invoke("check", path)
    assert (code, "[changed_file]" in text) == (2, True)


def test_a_file_written_again_with_the_same_content_is_no_other_file(
    study: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    deals = study.parent / "deals.csv"
    again = after(measured.read_inputs, lambda: deals.write_bytes(deals.read_bytes()))
    monkeypatch.setattr(measured, "read_inputs", again)
    code, _ = invoke("run", study, "--out", tmp_path / "out", "--quiet")
    assert code == 0
    said = json.loads((tmp_path / "out" / store.MARK).read_text())["inputs"]["deals"]
    assert said["sha256"] == subprocess.getoutput(f"sha256sum '{deals}'").split()[0]


def full(*_: object) -> int:
    raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))


def test_no_room_is_said_in_plain_words(
    study: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    store.write_folder(tmp_path / "out", OLD)
    monkeypatch.setattr(Path, "write_bytes", full)
    code, text = invoke("run", study, "--out", tmp_path / "out", "--quiet")
    monkeypatch.undo()
    assert code == 2
    for part in ("[disk_full]", "no room left", "MB are needed", "MB are free", "another disk"):
        assert part in plain(text)
    assert "Errno" not in text
    assert (tmp_path / "out" / "a.txt").read_bytes() == b"old"
    assert sorted(path.name for path in tmp_path.iterdir()) == ["mine", "out"]
    code, _ = invoke("run", study, "--out", tmp_path / "out", "--quiet")
    assert (code, (tmp_path / "out" / "a.txt").exists()) == (0, False)


def test_no_room_for_a_copy_in_another_encoding(
    study: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The copy is temporary; the table itself is not at fault."""
    from pipeline.inputs import csv_text

    deals = study.parent / "deals.csv"
    deals.write_text(deals.read_text(), encoding="utf-16")
    monkeypatch.setattr(csv_text, "_decoded", full)
    code, text = invoke("check", study)
    assert (code, "[disk_full]" in text, "TMPDIR" in text) == (2, True, True)


def in_a_child(work: Callable[[], object]) -> int:
    """The exit code of a forked process: 0 done, 2 refused in words, 9 anything else."""
    child = os.fork()
    if child:
        return os.waitstatus_to_exitcode(os.waitpid(child, 0)[1])
    code = 9
    try:
        work()
        code = 0
    except InputProblem as refusal:
        code = {"disk_full": 2, "output_folder": 3}[refusal.findings[0].rule]
    finally:
        os._exit(code)


@POSIX
def test_a_limit_on_the_size_of_files(tmp_path: Path) -> None:
    """The system's own refusal, not one made up here."""
    folder = tmp_path / "out"
    store.write_folder(folder, OLD)

    def work() -> None:
        signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
        resource.setrlimit(resource.RLIMIT_FSIZE, (1000, 1000))
        store.write_folder(folder, {"a.txt": b"new", "b.bin": b"x" * 5000, store.MARK: b"{}"})

    assert in_a_child(work) == 2
    assert (folder / "a.txt").read_bytes() == b"old"
    assert [path.name for path in tmp_path.iterdir()] == ["out"]


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Path]:
    """A disk of 64 kB, where the system lets the tests have one."""
    place = tmp_path / "disk"
    place.mkdir()
    order = ["mount", "-t", "tmpfs", "-o", "size=64k", "tmpfs", str(place)]
    if shutil.which("mount") is None or subprocess.run(order, capture_output=True).returncode:
        pytest.skip("no right to make a disk here")
    yield place
    subprocess.run(["umount", str(place)], check=True)


def test_a_disk_that_is_full(small_disk: Path) -> None:
    folder = small_disk / "out"
    store.write_folder(folder, OLD)
    with pytest.raises(InputProblem, match="no room left") as caught:
        store.write_folder(folder, {"a.txt": b"new", "b.bin": b"x" * 100_000, store.MARK: b"{}"})
    assert caught.value.findings[0].rule == "disk_full"
    assert (folder / "a.txt").read_bytes() == b"old"
    assert [path.name for path in small_disk.iterdir()] == ["out"]
    store.write_folder(folder, {"a.txt": b"new", store.MARK: b"{}"})
    assert (folder / "a.txt").read_bytes() == b"new"


@POSIX
@pytest.mark.parametrize("closed", ["out", "."])
def test_a_folder_that_may_not_be_written(closed: str) -> None:
    """Also for one that only its own folder, or the run itself, is closed."""
    home = Path(tempfile.mkdtemp(prefix="dealwake-closed-"))
    try:
        store.write_folder(home / "out", OLD)
        for path in (home, *home.rglob("*")):
            os.chown(path, NOBODY, NOBODY) if os.getuid() == 0 else None
        home.chmod(0o755)
        (home / closed).chmod(0o555)

        def work() -> None:
            if os.getuid() == 0:
                os.setuid(NOBODY)
            store.write_folder(home / "out", {"a.txt": b"new", store.MARK: b"{}"})

        assert in_a_child(work) == 3
        assert (home / "out" / "a.txt").read_bytes() == b"old"
        assert [path.name for path in home.iterdir()] == ["out"]
    finally:
        home.chmod(0o755)
        (home / "out").chmod(0o755)
        shutil.rmtree(home)


def run_files(mark: str) -> dict[str, bytes]:
    return {**{f"data/{at}.txt": mark.encode() for at in range(20)}, store.MARK: mark.encode()}


def whole(folder: Path, writers: int) -> bool:
    found = {path.relative_to(folder).as_posix(): path.read_bytes() for path in folder.rglob("*.*")}
    return any(found == run_files(f"run {at}") for at in range(writers))


@pytest.mark.parametrize("in_one_step", [True, False])
@pytest.mark.parametrize("first", [True, False])
def test_runs_that_write_one_folder_at_the_same_time(
    in_one_step: bool, first: bool, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """All end well, and the folder is one of them, never a mixture and never a part."""
    folder, writers, faults = tmp_path / "out", 4, []
    if not in_one_step:
        monkeypatch.setattr(store, "exchanged", lambda one, other: False)
    if not first:
        store.write_folder(folder, run_files("run 0"))

    def write(at: int) -> None:
        try:
            for _ in range(15):
                store.write_folder(folder, run_files(f"run {at}"))
        except Exception as fault:
            faults.append(fault)

    threads = [threading.Thread(target=write, args=[at]) for at in range(writers)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert faults == []
    assert whole(folder, writers)
    assert [path.name for path in tmp_path.iterdir()] == ["out"]


@POSIX
def test_two_processes_and_a_reader(tmp_path: Path) -> None:
    """A folder opened at any moment is a whole run, where names are exchanged in one step."""
    folder = tmp_path / "out"
    store.write_folder(folder, run_files("run 0"))
    if disk._exchange_call() is None:
        pytest.skip("names are exchanged in two steps here")
    children = []
    for at in range(2):
        child = os.fork()
        if not child:
            try:
                for _ in range(40):
                    store.write_folder(folder, run_files(f"run {at}"))
                os._exit(0)
            finally:
                os._exit(9)
        children.append(child)
    looks = 0
    while looks < 200:
        assert folder.is_dir()
        assert (folder / store.MARK).is_file()
        looks += 1
    assert [os.waitpid(child, 0)[1] for child in children] == [0, 0]
    assert whole(folder, 2)
    assert [path.name for path in tmp_path.iterdir()] == ["out"]


def test_what_may_be_swept(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Not what a live process, this one or another machine may still be writing."""
    here, dead = store._machine(), 2_000_000_000
    kept = [f".out.{os.getppid()}.{here}.00000000.new", f".out.{dead}.ffffffff.00000000.new"]
    gone = [f".out.{os.getpid()}.{here}.00000000.new", f".out.{dead}.{here}.00000000.new"]
    others = [".out.txt", ".outer.1.new", ".out.new"]
    for name in (*kept, *gone, *others):
        (tmp_path / name).mkdir()
    store.write_folder(tmp_path / "out", OLD)
    assert {path.name for path in tmp_path.iterdir()} == {"out", *kept, *others}
    monkeypatch.setattr(store, "A_DAY", -1)
    store.write_folder(tmp_path / "out", OLD)
    assert {path.name for path in tmp_path.iterdir()} == {"out", *others}


def test_the_other_files_are_written_whole_or_not_at_all(
    study: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    place = tmp_path / "notes.txt"
    place.write_bytes(b"old")
    monkeypatch.setattr(Path, "replace", full)
    with pytest.raises(InputProblem, match="no room left"):
        disk.write_file(place, b"new", "--page")
    monkeypatch.undo()
    assert place.read_bytes() == b"old"
    assert sorted(path.name for path in tmp_path.iterdir()) == ["mine", "notes.txt"]


@POSIX
def test_runs_that_are_killed(tmp_path: Path) -> None:
    """A few of the kills of ``tests.benchmarks.kills``, which makes a hundred."""
    tally = kills(4, tmp_path, light=True)
    assert sum(tally.by_stage.values()) == 4
    assert set(tally.found) <= {"the run before, whole", "its own run, whole"}
    assert set(tally.reruns) <= {"exit 0, whole"}
    assert tally.leftovers_kept == 0


def test_a_mixture_would_be_seen(tmp_path: Path) -> None:
    """The check of the kills is no check if it cannot fail."""
    from tests.benchmarks.kills import Bench

    bench = Bench(tmp_path)
    study = {"study": {"event_time": {"headline": WINDOWS[0]}}, "inputs": {}}
    mark = {store.MARK: json.dumps(study).encode()}
    for files in ({"a": b"1", "b": b"1", **mark}, {"a": b"2", "b": b"2", **mark}):
        store.write_folder(bench.out, files)
        bench.whole.append(contents(bench.out))
    assert bench.state() == 1
    (bench.out / "a").write_bytes(b"1")
    assert bench.state() == "a mixture"
    (bench.out / "a").unlink()
    assert bench.state() == "a mixture"
    shutil.rmtree(bench.out)
    assert bench.state() == "no folder"
