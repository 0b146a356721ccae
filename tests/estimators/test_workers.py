"""Workers share long work: the same bytes from one process, two, and a cluster that loses one."""

from __future__ import annotations

import os
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from pipeline.core.findings import InputProblem
from pipeline.estimators import selection_bootstrap as boot
from pipeline.estimators import workers
from pipeline.estimators.probit import Equation, fit_probit
from pipeline.flow import check
from pipeline.study.compute import Compute
from pipeline.study.load import load_study
from tests.estimators import work
from tests.estimators.designs import deals

DRAWS, AT_ONCE = 75, 25
DEMO = Path(__file__).resolve().parents[2] / "configs" / "demo.toml"


@pytest.fixture(scope="module")
def scheduler(tmp_path_factory: pytest.TempPathFactory) -> Iterator[str]:
    """A scheduler with two workers, processes of this machine."""
    distributed = pytest.importorskip(
        "dask.distributed", reason="dask is not installed: pip install 'dealwake[cluster]'"
    )
    import dask

    folder = str(tmp_path_factory.mktemp("dask"))
    with (
        dask.config.set({"distributed.admin.log-format": "%(message)s"}),
        distributed.LocalCluster(
            n_workers=2,
            threads_per_worker=1,
            processes=True,
            dashboard_address=None,
            local_directory=folder,
            silence_logs=50,
        ) as cluster,
    ):
        yield str(cluster.scheduler_address)


def resampled() -> boot.Resampled:
    design = deals()
    rows = design.selection
    assert rows is not None
    equation = Equation(rows.selected, rows.W, rows.names, "announcing", rows.names[-1])
    return boot.bootstrap_both_steps(design, rows, fit_probit(equation), equation, DRAWS, 3)


@pytest.fixture
def heavy(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(boot, "AT_ONCE", AT_ONCE)
    monkeypatch.setattr(boot, "WORTH_A_PROCESS", 1)


def test_parts_come_back_in_order_and_large_arrays_once(scheduler: str) -> None:
    common = np.arange(200_000.0)
    parts = [(at,) for at in range(40)]
    with workers.shared_by("dask", scheduler):
        found = workers.spread(work.thread_count, common, parts, heavy=True)
    assert found == [(at, common.sum(), 1) for at in range(40)]


def test_light_work_stays_in_this_process(scheduler: str) -> None:
    def here(common: int, at: int) -> tuple[int, int]:
        return os.getpid(), common + at

    with workers.shared_by("dask", scheduler):
        assert workers.spread(here, 1, [(1,), (2,)], heavy=False) == [
            (os.getpid(), 2),
            (os.getpid(), 3),
        ]


def findings_of(compute: Compute) -> list[Any]:
    study = replace_compute(compute)
    begun: list[str] = []
    with pytest.raises(InputProblem) as caught:
        check(study, begun.append)
    assert begun == []
    return list(caught.value.findings)


def replace_compute(compute: Compute) -> Any:
    return load_study(DEMO).model_copy(update={"compute": compute})


def test_without_the_library_nothing_is_begun(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(sys.modules, "dask.distributed", None)
    (found,) = findings_of(Compute(backend="dask", scheduler="tcp://127.0.0.1:1"))
    assert (found.rule, found.column) == ("no_workers", "compute.backend")
    assert "dealwake[cluster]" in found.remedy


def test_without_a_scheduler_nothing_is_begun(monkeypatch: pytest.MonkeyPatch) -> None:
    pytest.importorskip("dask.distributed", reason="dask is not installed")
    monkeypatch.setattr(workers, "SECONDS", 0.3)
    (found,) = findings_of(Compute(backend="dask", scheduler="tcp://127.0.0.1:1"))
    assert found.got == "no answer from tcp://127.0.0.1:1"


def test_too_few_workers(scheduler: str, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(workers, "SECONDS", 2.0)
    (found,) = findings_of(Compute(backend="dask", scheduler=scheduler, workers=7))
    assert (found.got, found.expected) == ("2 workers after 2 seconds", "7 or more")


def test_workers_of_other_versions_are_refused(
    scheduler: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    own = workers.versions()
    with pytest.raises(InputProblem) as caught:
        workers._alike({"tcp://a": own, "tcp://b": (own[0], "numpy 1.0", own[2])})
    assert "tcp://b with" in caught.value.findings[0].got
    with pytest.raises(InputProblem) as caught:
        workers._alike({"tcp://c": ModuleNotFoundError("pipeline")})
    assert "without dealwake" in caught.value.findings[0].got


@pytest.mark.parametrize(
    "keys", [{"backend": "dask"}, {"scheduler": "tcp://a:1"}, {"backend": "dask", "scheduler": "a"}]
)
def test_backend_and_scheduler_fit_together(keys: dict[str, Any]) -> None:
    with pytest.raises(ValueError, match=r"address|backend"):
        Compute(**keys)


@pytest.mark.parametrize("backend", ["dask", "loky"])
def test_a_worker_that_is_killed_costs_no_byte(
    backend: str, scheduler: str, heavy: None, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    with workers.shared_by("loky", workers=1):
        alone = resampled()
    mark = tmp_path / "mark"
    real = workers.spread

    def with_an_end(task: Any, common: Any, parts: Any, *rest: Any) -> Any:
        assert task is boot._block
        return real(work.ended_once, common, [(*part, str(mark)) for part in parts], *rest)

    monkeypatch.setattr(boot, "spread", with_an_end)
    with workers.shared_by(backend, scheduler if backend == "dask" else "", 2):
        shared = resampled()
    assert mark.exists()
    assert shared.second.tobytes() == alone.second.tobytes()
