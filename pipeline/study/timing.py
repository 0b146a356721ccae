"""Keys about time: windows in sessions, day zero, and which events count."""

from __future__ import annotations

from typing import Literal

from pydantic import Field, model_validator

from pipeline.core.window import Window
from pipeline.study.part import ORDERED, Part, Span, misfit
from pipeline.study.prices import Delisting, Kind, Missing

Confounding = Literal["flag", "exclude", "dummy"]
DayZero = Literal["announcement", "earliest"]
Repeats = Literal["keep_first", "merge", "keep_all"]


class EventTime(Part):
    """Sessions are those of the security's own exchange, counted from day zero."""

    estimation: Span = Field([-250, -31], description="Estimation window, sessions, inclusive.")
    minimum_observations: int = Field(
        120, ge=30, description="Returns that the estimation window must hold."
    )
    headline: Span = Field([-1, 1], description="The window declared before looking.")
    windows: list[Span] = Field(
        default_factory=list, description="Secondary windows, adjusted for multiplicity."
    )
    cutoff_minutes: int = Field(
        0, ge=0, le=120, description="News this close to the close counts for the next session."
    )
    share_of_days: float = Field(
        0.8, gt=0, le=1, description="Share of a secondary window's days that must have traded."
    )
    mask_sessions: int = Field(
        5, ge=0, description="Sessions around another deal that are left out of estimation."
    )
    confounding_days: int = Field(
        1, ge=0, description="Sessions within which an earnings release is flagged."
    )
    confounding: Confounding = Field(
        "flag",
        description="What becomes of a deal with other news that near: flag it, exclude it, or "
        "take the news sessions out of its returns, each by a dummy.",
    )
    day_zero: DayZero = Field(
        "announcement",
        description="The date that counts: of the announcement, or the earliest, a rumour's too "
        "(column rumoured_at). The report shows both.",
    )
    repeats: Repeats = Field(
        "keep_first",
        description="Deals of one company whose headline windows meet: the first alone, one event "
        "made of them, or all, with errors clustered by company in the regression.",
    )
    side: str = Field("", description="The side of the deals meant, for a list with a column side.")
    second_lines: bool = Field(
        False, description="Show the mean on the second listing too, where a company has one."
    )
    returns: Kind = Field(
        "simple", description="Kind of the returns added up: simple or log. See the report."
    )
    missing: Missing = Field(
        "drop",
        description="A session without a price: drop leaves a gap, trade_to_trade matches the next "
        "return with the benchmark since the last price, lumped takes zero (for comparison).",
    )
    delisting: Delisting = Field(
        "supplied",
        description="Returns of inputs.delistings: drop uses none, supplied those given, shumway "
        "also the published mean where a delisting for performance has none.",
    )
    real_jumps: list[str] = Field(
        default_factory=list,
        description="Deals whose price moved by a whole factor for real, not by a split.",
    )

    @model_validator(mode="after")
    def _ordered(self) -> EventTime:
        named = [("estimation", self.estimation), ("headline", self.headline)]
        for name, (start, end) in (*named, *(("windows", pair) for pair in self.windows)):
            if end < start:
                raise misfit(f"[{start}, {end}] in '{name}'", ORDERED)
        return self

    @property
    def estimation_window(self) -> Window:
        """The estimation window."""
        return Window(*self.estimation)

    @property
    def headline_window(self) -> Window:
        """The window declared before looking."""
        return Window(*self.headline)

    @property
    def all_windows(self) -> tuple[Window, ...]:
        """The headline window, then each secondary one once."""
        listed = [Window(*pair) for pair in (self.headline, *self.windows)]
        return tuple(dict.fromkeys(listed))
