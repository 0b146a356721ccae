"""Which columns a study uses, and what it says of the deal list."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field


@dataclass(frozen=True, slots=True)
class Wanted:
    """Which columns beyond the fixed ones a study uses, by table and kind.

    ``candidate_extras`` are read from the candidates if they are there.
    """

    deal_numbers: tuple[str, ...] = ()
    deal_texts: tuple[str, ...] = ()
    candidate_numbers: tuple[str, ...] = ()
    candidate_texts: tuple[str, ...] = ()
    candidate_extras: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class DealRules:
    """What a study declares about its deal list.

    Attributes:
        side: the side of the deals meant, if the list holds both; '' for a list without sides.
        payment_shares: columns that add up to the whole price, in fractions or in percent.
        fractions, percents: columns of shares, and the unit of each.
        levels: column -> the words it may hold.
        common: the currency that all money is converted into; '' if it stays as it is.
    """

    side: str = ""
    payment_shares: tuple[str, ...] = ()
    fractions: tuple[str, ...] = ()
    percents: tuple[str, ...] = ()
    levels: Mapping[str, tuple[str, ...]] = field(default_factory=dict)
    common: str = ""

    @property
    def numbers(self) -> tuple[str, ...]:
        """The numeric columns they are about."""
        return tuple(dict.fromkeys((*self.payment_shares, *self.fractions, *self.percents)))
