"""What every table of a study file is made of: strict, frozen models and the names they allow."""

from __future__ import annotations

from typing import Annotated

from pydantic import AfterValidator, BaseModel, ConfigDict, Field
from pydantic_core import PydanticCustomError

from pipeline.registry import (
    ESTIMATORS,
    EXPECTED_RETURNS,
    FORMATS,
    PRICE_MEASURES,
    TESTS,
    keys,
)

BY_RULE = "by_rule"
ORDERED = "a window whose last session is its first or comes after it"


class Part(BaseModel):
    """A table of the study file: strict, frozen, no unknown key."""

    model_config = ConfigDict(extra="forbid", frozen=True, strict=True, populate_by_name=True)


def misfit(got: str, expected: str) -> PydanticCustomError:
    """What a validator of several keys raises, to say which of their values it refuses."""
    return PydanticCustomError("misfit", "{expected}", {"got": got, "expected": expected})


def known(table: str, *also: str) -> AfterValidator:
    """A check that a value is one of the registry's names of that kind, or of ``also``."""
    names = (*also, *keys(table))

    def check(value: str) -> str:
        if value not in names:
            raise ValueError(f"must be one of {', '.join(names)}")
        return value

    check.names = names  # type: ignore[attr-defined]
    return AfterValidator(check)


Model = Annotated[str, known(EXPECTED_RETURNS)]
Test = Annotated[str, known(TESTS)]
LeadingTest = Annotated[str, known(TESTS, BY_RULE)]
Estimator = Annotated[str, known(ESTIMATORS)]
Format = Annotated[str, known(FORMATS)]
Measure = Annotated[str, known(PRICE_MEASURES)]
Span = Annotated[list[int], Field(min_length=2, max_length=2)]
Rationale = Annotated[str, Field(min_length=20)]
