"""Who does the parts of long work: processes of this machine, or the workers of a dask scheduler.

No number depends on the choice: each part has what it needs, its random stream too, and the parts
come back in their order.
"""

from __future__ import annotations

import pickle
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from contextvars import ContextVar
from importlib import import_module
from importlib.metadata import version
from typing import Any, TypeVar

from pipeline.core.findings import InputProblem, problem

LOCAL, CLUSTER = "loky", "dask"
SECONDS = 30.0
"""How long is waited for the scheduler to answer, and again for its workers to come."""
DECIDING = ("dealwake", "numpy", "scipy")
"""Packages of which another version could move the last bit of a number."""

Made = TypeVar("Made")
_processes: ContextVar[int] = ContextVar("processes", default=0)
_client: ContextVar[Any] = ContextVar("client", default=None)


@contextmanager
def shared_by(backend: str, scheduler: str = "", workers: int = 0) -> Iterator[None]:
    """What :func:`spread` is asked for inside is done by these workers.

    Args:
        backend: ``loky``, processes of this machine, or ``dask``.
        scheduler: address of the dask scheduler.
        workers: processes at most, all cores if 0; of a scheduler, the workers waited for.

    Raises:
        InputProblem: ``no_workers`` if the library is not installed, the scheduler does not
            answer, has too few workers, or one of them would compute with other versions.
    """
    client = _joined(scheduler, max(workers, 1)) if backend == CLUSTER else None
    held = _processes.set(workers), _client.set(client)
    try:
        yield
    finally:
        _processes.reset(held[0])
        _client.reset(held[1])
        if client is not None:
            client.close()


def spread(
    task: Callable[..., Made],
    common: Any,
    parts: Sequence[tuple[Any, ...]],
    heavy: bool,
    workers: int = 0,
) -> list[Made]:
    """``task(common, *part)`` for every part, in order.

    ``common``, which may be large, goes to each worker once. Work that is not ``heavy`` stays in
    this process, whatever workers there are, unless ``workers`` asks for processes. A worker that
    is lost costs time: its parts are done again.
    """
    import joblib

    client = _client.get()
    if client is not None and heavy and not workers:
        packed = pickle.dumps(common)
        work = [joblib.delayed(_elsewhere)(task, packed, *part) for part in parts]
        with joblib.parallel_config("dask", client=client, scatter=[packed]):
            return list(joblib.Parallel(n_jobs=-1)(work))
    work = [joblib.delayed(task)(common, *part) for part in parts]
    wanted = workers or ((_processes.get() or joblib.cpu_count()) if heavy else 1)
    return _here(work, min(wanted, len(parts)))


def _elsewhere(task: Callable[..., Made], packed: bytes, *part: Any) -> Made:
    """The task in a process that others have started.

    It is set to one BLAS thread for good: where two tasks run at a time, taking the limit back
    after the one would move the last bits of the other. Arrays are unpacked here, because those
    that dask hands over lie in memory as they came from the net, and sums over arrays that begin
    at odd places are added up in another order.
    """
    import threadpoolctl

    threadpoolctl.threadpool_limits(1)
    return task(pickle.loads(packed), *part)


def _here(work: list[Any], processes: int) -> list[Any]:
    """The parts done by processes of this machine; by this one alone if one of them is ended."""
    import joblib
    from joblib.externals.loky.process_executor import TerminatedWorkerError

    try:
        return list(joblib.Parallel(n_jobs=processes)(work))
    except TerminatedWorkerError:
        return list(joblib.Parallel(n_jobs=1)(work))


def _joined(scheduler: str, workers: int) -> Any:
    """A client of the scheduler, whose workers are there and compute as this process does."""
    try:
        connected: Any = import_module("dask.distributed").Client
    except ImportError:
        raise _refused(
            "no library for a cluster",
            "the packages dask and distributed",
            "Install them: pip install 'dealwake[cluster]'.",
            "compute.backend",
        ) from None
    remedy = "Start it (dask scheduler, dask worker), or correct compute.scheduler."
    try:
        client = connected(scheduler, timeout=SECONDS, set_as_default=False)
    except (OSError, TimeoutError, ValueError):
        raise _refused(
            f"no answer from {scheduler}", "a dask scheduler at that address", remedy
        ) from None
    try:
        client.wait_for_workers(workers, timeout=SECONDS)
        told = client.run(versions, on_error="return")
        _alike(told)
    except TimeoutError:
        there = len(client.scheduler_info(n_workers=-1)["workers"])
        client.close()
        raise _refused(
            f"{there} workers after {SECONDS:.0f} seconds",
            f"{workers} or more",
            "Start more workers, or lower compute.workers.",
            "compute.workers",
        ) from None
    except InputProblem:
        client.close()
        raise
    return client


def versions() -> tuple[str, ...]:
    """The versions that decide the last bit of a number, of the process that is asked."""
    return tuple(f"{name} {version(name)}" for name in DECIDING)


def _alike(told: dict[str, Any]) -> None:
    """Refuse workers of other versions, or without the package."""
    for worker, answer in told.items():
        if isinstance(answer, Exception):
            raise _refused(
                f"worker {worker} without dealwake ({type(answer).__name__})",
                "the package on every worker",
                "Install the same dealwake where that worker runs, and start it again.",
            )
        if tuple(answer) != versions():
            raise _refused(
                f"worker {worker} with {', '.join(answer)}",
                ", ".join(versions()),
                "Install the same versions where that worker runs: others may move a number.",
            )


def _refused(got: str, expected: str, remedy: str, key: str = "compute.scheduler") -> InputProblem:
    return problem(
        "no_workers", "study file", got=got, expected=expected, remedy=remedy, column=key
    )
