"""Keys about how the work is done; none of them changes a number."""

from __future__ import annotations

from pydantic import Field

from pipeline.study.part import Part


class Compute(Part):
    """How the work is done. Nothing here changes a number."""

    keep: float = Field(
        4.0,
        ge=0,
        description="GiB on this machine for prices and abnormal returns that took long to make: a "
        "rerun with other windows or columns takes them from there; 0 keeps nothing.",
    )
