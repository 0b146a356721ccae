"""Keys about what a benchmark must be like."""

from __future__ import annotations

from pydantic import Field

from pipeline.study.part import Part


class BenchmarkChecks(Part):
    """When a benchmark is doubted; the defaults are common practice."""

    largest_weight: float = Field(
        0.10,
        gt=0,
        le=1,
        description="Share of the benchmark's market value above which a deal is flagged, where "
        "the benchmark file has a column market_value.",
    )
    dominating_correlation: float = Field(
        0.95, gt=0, lt=1, description="Correlation above which it is flagged where there is none."
    )
    identical_correlation: float = Field(
        0.999, gt=0, lt=1, description="Correlation above which the benchmark is the share: error."
    )
    lowest_correlation: float = Field(
        0.05, ge=0, lt=1, description="Correlation below which a benchmark says nothing of a share."
    )
    highest_risk_free: float = Field(
        0.002,
        gt=0,
        lt=1,
        description="Mean risk-free return a session above which it is no daily rate: error.",
    )
