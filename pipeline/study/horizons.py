"""Keys about longer horizons: portfolios in calendar time, and matched companies."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, model_validator

from pipeline.study.part import ORDERED, Part, Span, misfit

Weighting = Literal["equal", "value"]


class CalendarTime(Part):
    """Portfolios that hold every company with a recent deal, session by session."""

    horizons: list[Annotated[int, Field(ge=5, le=1260)]] = Field(
        default_factory=list,
        description="Sessions a company is held after its deal; none leaves the portfolios out.",
    )
    weightings: Annotated[list[Weighting], Field(min_length=1)] = Field(
        ["equal"],
        description="Weights of the companies held: equal, by market value, or both.",
    )
    first_session: int = Field(
        1, ge=0, le=60, description="The first session held, counted from day zero."
    )
    fewest_holdings: int = Field(
        10, ge=1, description="Companies a session must hold to count; the others are left out."
    )
    regressors: Literal["benchmark", "factors"] = Field(
        "benchmark", description="What the portfolio is measured against."
    )
    errors: Literal["newey_west", "white"] = Field(
        "newey_west", description="Errors: for autocorrelation too, or for unequal variance alone."
    )


class MatchedControl(Part):
    """Buy-and-hold returns against the company that was most alike before the deal."""

    windows: list[Span] = Field(
        default_factory=list,
        description="Sessions held, inclusive, such as [1, 250]; none leaves the comparison out.",
    )
    within: list[str] = Field(
        default_factory=list,
        description="Columns of the candidates in which a control must be the same: industry.",
    )
    nearest: list[str] = Field(
        default_factory=list,
        description="Numeric columns of the candidates in which it must be nearest: market_value.",
    )

    @model_validator(mode="after")
    def _fit_together(self) -> MatchedControl:
        for start, end in self.windows:
            if end < start:
                raise misfit(f"[{start}, {end}] in 'windows'", ORDERED)
        if self.windows and not self.nearest:
            raise ValueError("nearest: at least one column that says who is most alike")
        return self
