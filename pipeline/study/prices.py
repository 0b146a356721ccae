"""Keys about prices: what each file holds, the common currency, and when a price is doubted."""

from __future__ import annotations

from typing import Literal

from pydantic import Field

from pipeline.study.part import Part

Kind = Literal["simple", "log"]
Unit = Literal["", "decimal", "percent"]
Dividends = Literal["", "included", "left_out"]
Missing = Literal["drop", "trade_to_trade", "lumped"]
Delisting = Literal["drop", "supplied", "shumway"]


class PriceFile(Part):
    """What a file of prices or index levels holds; its numbers are held against it."""

    given: Literal["closes", "returns"] = Field(
        "closes", description="A column close, or a column return in its place."
    )
    returns: Kind = Field("simple", description="The kind of the returns, where they are given.")
    unit: Unit = Field(
        "", description="Of the returns: decimal or percent. Not said, decimal is read and tested."
    )
    dividends: Dividends = Field(
        "", description="Whether dividends are in the prices: included or left_out."
    )
    currency: str = Field("", description="ISO 4217 code, for rows without a column currency.")


class FactorFile(Part):
    """What the file of factor returns holds."""

    returns: Kind = Field("simple", description="Their kind; must be that of the study.")
    unit: Unit = Field("", description="decimal or percent. Not said, decimal is read and tested.")
    currency: str = Field("", description="ISO 4217 code, if prices are converted.")


class Series(Part):
    """What the files of prices, benchmarks and factors hold."""

    prices: PriceFile = Field(default_factory=PriceFile)
    benchmarks: PriceFile = Field(default_factory=PriceFile)
    factors: FactorFile = Field(default_factory=FactorFile)


class Currency(Part):
    """One currency for all, through the table of rates."""

    common: str = Field(
        "",
        description="ISO 4217 code. Closes and benchmarks are converted at the rate of their "
        "session, money at the rate one session before the window. Empty: nothing is.",
    )


class Screens(Part):
    """When a price is doubted; the defaults are common practice."""

    nonpositive_share: float = Field(
        0.01, ge=0, lt=1, description="Share of a security's closes of zero or below: error above."
    )
    zero_returns_flag: float = Field(
        0.2, gt=0, le=1, description="Share of unchanged prices before a deal that is flagged."
    )
    zero_returns_drop: float = Field(
        0.5, gt=0, le=1, description="Share of unchanged prices that drops the deal."
    )
    no_trade_flag: float = Field(
        0.2, gt=0, le=1, description="Share of sessions of volume zero that is flagged."
    )
    stale_run: int = Field(
        5, ge=2, description="Sessions in a row with one price that are flagged."
    )
    gaps_flag: float = Field(
        0.05, ge=0, le=1, description="Share of sessions without a return that is flagged."
    )
    large_return: float = Field(
        0.5, gt=0, description="Size of a daily return that is flagged, decimal."
    )
    split_tolerance: float = Field(
        0.03, gt=0, lt=0.2, description="How near a move must be to a whole factor for a split."
    )
    calm_benchmark: float = Field(
        0.05, gt=0, description="Benchmark's return below which such a move is no market's."
    )
    together_share: float = Field(
        0.2, gt=0, le=1, description="Share of securities that jump on one session: warning."
    )
    together_jump: float = Field(
        8.0, gt=1, description="Such a jump, in the security's usual absolute returns."
    )
    off_session_share: float = Field(
        0.02, ge=0, lt=1, description="Share of prices on days without a session: error above."
    )
    closed_share: float = Field(
        0.5, gt=0, le=1, description="Share of prices below which a session was perhaps none."
    )
    benchmark_gaps: float = Field(
        0.02, ge=0, lt=1, description="Share of sessions without a benchmark: error above."
    )
    sparse_sessions: int = Field(
        4, ge=2, description="Sessions between two prices from which on a file is not daily: error."
    )
    without_prices: float = Field(
        0.2, ge=0, le=1, description="Share of deals whose security has no prices: error above."
    )
    longest_halt: int = Field(
        10, ge=0, description="Sessions a halt may last for day zero to move past it; 0 never."
    )
