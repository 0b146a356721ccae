"""Which column plays which part: the cells first, the name as a second witness."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from pipeline.drafting.likeness import EXACT, likeness
from pipeline.drafting.roles import ALLOWS, Role
from pipeline.drafting.signs import Signs
from pipeline.drafting.tables import Found
from pipeline.drafting.words import COLUMNS

CLOSE_CALL = 0.3


@dataclass(frozen=True, slots=True)
class Match:
    """A column taken for a part.

    ``rival`` is another column that would do nearly as well, '' if none would; ``said`` how far
    the name agrees; ``shown`` how far the cells do.
    """

    role: str
    column: str
    shown: float
    said: float
    rival: str = ""

    @property
    def strength(self) -> float:
        """Both witnesses together."""
        return self.shown + self.said


def match(found: Found, roles: Sequence[Role]) -> dict[str, Match]:
    """Part -> column, each column in one part at most, the strongest pairs first."""
    pairs = [
        Match(role.name, name, shown, likeness(name, COLUMNS.get(role.name, (role.name,))))
        for role in roles
        for name, signs in found.signs.items()
        if (shown := role.fits(signs)) > 0
    ]
    named = {role.name for role in roles if role.named}
    pairs = [pair for pair in pairs if pair.said > 0 or pair.role not in named]
    must = {role.name for role in roles if role.must}
    order = [role.name for role in roles]
    pairs.sort(key=lambda pair: (-_weight(pair, must), order.index(pair.role), pair.column))
    taken: dict[str, Match] = {}
    for pair in pairs:
        used = {other.column for other in taken.values()}
        if pair.role not in taken and pair.column not in used:
            taken[pair.role] = pair
    return {role: _with_rival(best, pairs, taken, found.signs) for role, best in taken.items()}


def _weight(pair: Match, must: set[str]) -> float:
    own = pair.column == pair.role
    return pair.strength + (0.5 if own else 0.0) + (0.1 if pair.role in must else 0.0)


def _with_rival(
    best: Match, pairs: Sequence[Match], taken: Mapping[str, Match], signs: Mapping[str, Signs]
) -> Match:
    """The match with the column that comes close to it, if one is left that does."""
    if best.column == best.role or (best.said == EXACT and best.shown > ALLOWS):
        return best
    used = {other.column for other in taken.values()}
    for pair in pairs:
        near = pair.role == best.role and best.strength - pair.strength < CLOSE_CALL
        if near and pair.column not in used and signs[pair.column].varies:
            return Match(best.role, best.column, best.shown, best.said, pair.column)
    return best
