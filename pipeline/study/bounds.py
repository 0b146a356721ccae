"""Keys about outcomes that are not seen for every deal."""

from __future__ import annotations

from collections.abc import Iterator
from typing import TYPE_CHECKING

from pydantic import Field

from pipeline.core.findings import Finding, Severity
from pipeline.study.part import Part, Rationale

if TYPE_CHECKING:
    from pipeline.study.schema import Study


class Bounds(Part):
    """Bounds on the effect when the feature itself may decide which outcomes are seen."""

    observed: str = Field(
        "",
        description="Column of the deals, 1 where the outcome counts (a deal that was completed), "
        "0 where it does not; whether the return could be measured if empty.",
    )
    cells: list[str] = Field(
        default_factory=list,
        description="Columns of the deals, few values each, within which bounds are made as well.",
    )
    draws: int = Field(999, ge=99, le=100_000, description="Replications for the intervals.")
    rationale: Rationale = Field(
        description="Why the feature is as good as random here, and moves being seen one way only."
    )


def bounds_checks(study: Study, file: str) -> Iterator[Finding]:
    """[bounds] needs a regression whose treatment is yes or no."""
    if study.bounds is None:
        return
    if study.regression is None or study.regression.continuous:
        yield Finding(
            "bad_value",
            Severity.ERROR,
            file,
            "[bounds] without a feature that is yes or no",
            "a [regression] whose treatment is 0 or 1",
            "Add it, or delete [bounds].",
            column="bounds",
        )
