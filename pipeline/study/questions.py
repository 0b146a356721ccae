"""Keys about the regressions: what is asked, how it is fitted, and what might overturn it."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field

from pipeline.core.design import COVARIANCES, LEARNERS
from pipeline.study.part import Estimator, Part, Rationale


class Regression(Part):
    """The cross-section of abnormal returns in the headline window."""

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
    curvature_only: bool = Field(
        False, description="Accept a selection model without an excluded variable."
    )


class Selection(Part):
    """Which companies announce at all."""

    explained_by: Annotated[list[str], Field(min_length=1)] = Field(
        description="Company variables, known for every candidate."
    )
    excluded: Annotated[list[str], Field(min_length=1)] = Field(
        description="Variables that move the decision to bid and nothing else."
    )
    rationale: Rationale = Field(description="The argument for the exclusion, printed verbatim.")


class Instruments(Part):
    """What moves the treatment and nothing else."""

    treatment: str = Field(alias="for", description="The variable they move.")
    use: Annotated[list[str], Field(min_length=1)] = Field(description="The instruments.")
    rationale: Rationale = Field(description="The argument for the exclusion, printed verbatim.")


Sign = Literal["+", "-", "0", "?"]


class SuspectedFactor(Part):
    """A factor nobody recorded, as you would argue it before a committee."""

    factor: str = Field(description="What it is.")
    on_outcome: Sign = Field(description="Sign of its effect on the return, all else equal.")
    on_treatment: Sign = Field(description="Sign of its effect on the choice of the feature.")
    evidence: str = Field("", description="Why you think so; printed verbatim.")


class SpecificationGrid(Part):
    """The specification curve: windows, models, controls, winsorising and samples, all combined."""

    run: bool = Field(False, description="Whether to make it.")
    control_sets: list[list[str]] = Field(
        default_factory=list, description="Sets of controls beside all of them and none."
    )
    winsorise: list[float] = Field(
        [0.0, 0.01], description="Shares of the outcome set to its quantile at either end."
    )
    permutations: int = Field(
        199, ge=0, le=100_000, description="Draws of the test of the whole curve; 0 leaves it out."
    )


class Scrutiny(Part):
    """What it would take to overturn the finding."""

    run: bool = Field(True, description="Whether to go through the doubts.")
    suspects: list[SuspectedFactor] = Field(
        default_factory=list,
        description="Factors nobody recorded: { factor, on_outcome, on_treatment, evidence }.",
    )
    reliability: dict[str, float] = Field(
        default_factory=dict,
        description="Variable -> share of its variance that is not error of record, in (0, 1].",
    )
    benchmarks: list[str] = Field(
        default_factory=list,
        description="Controls a hidden factor is likened to; the strongest one if empty.",
    )
    grid: SpecificationGrid = Field(default_factory=SpecificationGrid)
    simulate_errors: bool = Field(
        False, description="Whether errors of record are simulated as well (slow)."
    )
