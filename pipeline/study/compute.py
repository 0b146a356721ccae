"""Keys about how the work is done; none of them changes a number."""

from __future__ import annotations

import re
from typing import Literal

from pydantic import Field, model_validator

from pipeline.study.part import Part, misfit

ADDRESS = re.compile(r"(tcp|tls|ws|wss|ucx)://\S+")


class Compute(Part):
    """How the work is done. Nothing here changes a number."""

    backend: Literal["loky", "dask"] = Field(
        "loky",
        description="Who shares long resampling: 'loky', processes of this machine; 'dask', the "
        "workers of a dask scheduler, on one machine or many.",
    )
    scheduler: str = Field(
        "",
        description="Address of the dask scheduler, such as 'tcp://10.0.0.5:8786'; its workers "
        "need dealwake, numpy and scipy of the same versions.",
    )
    workers: int = Field(
        0,
        ge=0,
        description="Processes to use at most, 0 for one a core; of a scheduler, how many of its "
        "workers to wait for before anything begins.",
    )
    keep: float = Field(
        4.0,
        ge=0,
        description="GiB on this machine for prices and abnormal returns that took long to make: a "
        "rerun with other windows or columns takes them from there; 0 keeps nothing.",
    )

    @model_validator(mode="after")
    def _whole(self) -> Compute:
        if self.backend == "dask" and not ADDRESS.fullmatch(self.scheduler):
            raise misfit(f"scheduler '{self.scheduler}'", "an address such as tcp://10.0.0.5:8786")
        if self.backend != "dask" and self.scheduler:
            raise misfit(
                f"a scheduler, and backend '{self.backend}'", "backend = 'dask' with a scheduler"
            )
        return self
