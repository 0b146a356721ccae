"""Keys about the deal list: what its columns of shares and of words may hold."""

from __future__ import annotations

from pydantic import Field

from pipeline.study.part import Part


class DealList(Part):
    """What you declare about columns of the deal list; the cells are held against it."""

    payment_shares: list[str] = Field(
        default_factory=list,
        description="Columns that add up to the whole price, all in fractions or all in percent.",
    )
    fractions: list[str] = Field(
        default_factory=list, description="Columns of shares in fractions: 0.3 for 30%."
    )
    percents: list[str] = Field(
        default_factory=list, description="Columns of shares in percent: 30 for 30%."
    )
    levels: dict[str, list[str]] = Field(
        default_factory=dict,
        description="The words a column may hold: { payment = ['cash', 'shares', 'both'] }.",
    )
