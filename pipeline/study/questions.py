"""Keys about the regressions: what is asked, how it is fitted, and what might overturn it."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, field_validator

from pipeline.core.design import COVARIANCES, LEARNERS
from pipeline.study.part import Estimator, Part, Rationale

FEWEST_DRAWS = 999


class Regression(Part):
    """The cross-section of the outcome: abnormal returns of the headline window, or [outcome]."""

    treatment: str = Field(description="The deal feature the committee can choose: 0 or 1.")
    continuous: bool = Field(
        False, description="Whether the treatment may have other values than 0 and 1."
    )
    controls: list[str] = Field(default_factory=list, description="Held fixed in every column.")
    fixed_effects: list[str] = Field(default_factory=list, description="Absorbed effects.")
    clusters: Annotated[list[str], Field(max_length=2)] = Field(
        default_factory=list, description="One or two dimensions of dependent errors."
    )
    columns: list[Estimator] = Field(
        default_factory=list,
        description="Estimators of the comparison table; all that the study allows if empty.",
    )
    expected_gain: bool = Field(
        False,
        description="Whether returns are also read as surprises to investors who foresee deals.",
    )


class Fit(Part):
    """How estimators are fitted, where they leave a choice."""

    covariance: Literal["auto", *COVARIANCES] = Field(  # type: ignore[valid-type]
        "auto", description="Errors; auto is each column's own rule, printed with it."
    )
    cluster_all: bool = Field(
        False, description="Cluster every column that can, not only those that do by rule."
    )
    learner: Literal[LEARNERS] = Field(  # type: ignore[valid-type]
        "penalised", description="How cross-fitted columns learn outcome and choice."
    )
    folds: int = Field(5, ge=1, le=20, description="Parts of the sample for cross-fitting.")
    matches: int = Field(1, ge=1, le=50, description="Nearest deals a deal is compared with.")
    bootstrap_draws: int = Field(
        1_999,
        ge=0,
        le=99_999,
        description="Draws of the cluster bootstrap of instrumented columns; 0 leaves it out.",
    )
    curvature_only: bool = Field(
        False, description="Let a selection model without an excluded variable lead."
    )


class Selection(Part):
    """Which companies announce at all."""

    explained_by: Annotated[list[str], Field(min_length=1)] = Field(
        description="Company variables, known for every candidate."
    )
    excluded: list[str] = Field(
        description="Variables that move the decision to bid and nothing else. Without one the "
        "column rests on the shape of the normal curve, says so and does not lead."
    )
    rationale: Rationale = Field(description="The argument for the exclusion, printed verbatim.")
    review: bool = Field(True, description="Whether to put the reviewers' questions to the model.")
    draws: int = Field(
        999, ge=0, le=100_000, description="Replications of both steps; 0 leaves them out."
    )

    @field_validator("draws")
    @classmethod
    def _enough(cls, value: int) -> int:
        if 0 < value < FEWEST_DRAWS:
            raise ValueError(f"0, or at least {FEWEST_DRAWS} replications for an interval")
        return value


class Instruments(Part):
    """What moves the treatment and nothing else."""

    treatment: str = Field(alias="for", description="The variable they move.")
    also_for: list[str] = Field(
        default_factory=list,
        description="Controls that are chosen as well and that the same instruments move.",
    )
    use: Annotated[list[str], Field(min_length=1)] = Field(description="The instruments.")
    rationale: Rationale = Field(description="The argument for the exclusion, printed verbatim.")
