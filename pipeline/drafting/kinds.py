"""What each table of a folder is."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field

from pipeline.drafting.beside import series_of, value_of
from pipeline.drafting.likeness import likeness
from pipeline.drafting.matching import Match, match
from pipeline.drafting.roles import GIVEN_AS_RETURNS, KINDS, Role, small
from pipeline.drafting.tables import Found
from pipeline.drafting.words import TABLES

LONG = 20  # rows a company from which on a table is a history
CLOSE_CALL = 0.25
Matches = Mapping[str, Match]


@dataclass(frozen=True, slots=True, eq=False)
class Recognised:
    """A table taken for one kind.

    Attributes:
        kind: the key under [inputs]; ``ready`` for a deal list without announcements.
        found: the table.
        matches: part -> column.
        score: how well it fits; ``rival`` is another kind that fits nearly as well.
        lacking: the parts it must have and lacks.
        returns: whether prices or levels are given as returns.
        reason: why it is taken for this kind.
    """

    kind: str
    found: Found
    matches: Matches
    score: float
    reason: str
    lacking: tuple[Role, ...] = ()
    returns: bool = False
    rival: str = ""

    def column(self, role: str) -> str:
        """The file's column for a part; '' if it has none."""
        return self.matches[role].column if role in self.matches else ""

    @property
    def others(self) -> list[str]:
        """Columns that play no part of the contract."""
        used = {item.column for item in self.matches.values()}
        return [name for name in self.found.signs if name not in used]


@dataclass(frozen=True, slots=True)
class _Shape:
    """What the rows of a kind look like: a test, and its words."""

    holds: Callable[[Found, Matches], bool]
    words: str


def _a_history(key: str) -> Callable[[Found, Matches], bool]:
    def holds(found: Found, matches: Matches) -> bool:
        named = matches.get(key)
        if named is None or "date" not in matches:
            return False
        signs = found.signs[named.column]
        one = found.one_row_a(named.column, matches["date"].column)
        return one and signs.rows >= LONG * max(1, signs.distinct)

    return holds


def _by_year(found: Found, matches: Matches) -> bool:
    company, year = matches.get("security"), matches.get("year")
    return company is not None and year is not None and found.one_row_a(
        company.column, year.column
    ) and not found.signs[company.column].unique  # fmt: skip


def _one_row_a(key: str) -> Callable[[Found, Matches], bool]:
    return lambda found, matches: key in matches and found.signs[matches[key].column].unique


def _columns_at_most(most: int) -> Callable[[Found, Matches], bool]:
    return lambda found, _: len(found.signs) <= most


def _left(found: Found, matches: Matches) -> bool:
    return _one_row_a("security")(found, matches) and len(found.signs) <= 5


def _factors(found: Found, matches: Matches) -> bool:
    used = {item.column for item in matches.values()}
    moving = [name for name, signs in found.signs.items() if name not in used and small(signs)]
    numbers = [name for name in found.of_kind("number") if name not in used]
    return len(moving) > 1 and len(moving) == len(numbers)


def _listed(found: Found, matches: Matches) -> bool:
    return not found.of_kind("date") and len(found.signs) <= 8


def _told(found: Found, matches: Matches) -> bool:
    return not found.of_kind("number") and len(found.signs) <= 5


SHAPES: Mapping[str, _Shape] = {
    "deals": _Shape(_one_row_a("deal_id"), "one row a deal, each with a date"),
    "ready": _Shape(_one_row_a("deal_id"), "one row a deal"),
    "prices": _Shape(_a_history("security"), "one row a company and date, a long history"),
    "benchmarks": _Shape(_a_history("exchange"), "one row an exchange and date, a long history"),
    "factors": _Shape(_factors, "an exchange, a date and several columns of small returns"),
    "candidates": _Shape(_by_year, "one row a company and year"),
    "rates": _Shape(_a_history("currency"), "one row a currency and date"),
    "delistings": _Shape(_left, "one row a company, with the day it left"),
    "listings": _Shape(_listed, "codes of lines and their exchanges, no dates"),
    "news": _Shape(_told, "a company, a date and a word, no numbers"),
    "peers": _Shape(_columns_at_most(3), "pairs of companies"),
    "restricted": _Shape(_columns_at_most(2), "codes of companies alone"),
}
BY_NAME_ONLY = ("restricted",)


def recognise(found: Found, *, priced: bool) -> list[Recognised]:
    """What a table may be, the best first; ``priced`` whether deals are measured from prices.

    A kind whose rows have another shape, or that lacks more than one column it must have, is none.
    """
    kinds = [kind for kind in KINDS if kind != ("ready" if priced else "deals")]
    options = [item for kind in kinds for item in _as(kind, found)]
    options.sort(key=lambda item: (-item.score, kinds.index(item.kind)))
    return options


def _as(kind: str, found: Found) -> list[Recognised]:
    """The table as one kind, with closes or with returns, if it can be that."""
    made = []
    for roles, returns in _versions(kind):
        matches = match(found, roles)
        lacking = tuple(role for role in roles if role.must and role.name not in matches)
        said = likeness(found.words, TABLES.get("deals" if kind == "ready" else kind, ()))
        if len(lacking) > (kind != "factors") or (kind in BY_NAME_ONLY and not said):
            continue
        if not SHAPES[kind].holds(found, matches):
            continue
        must = [role for role in roles if role.must]
        strength = sum(matches[role.name].strength for role in must if role.name in matches)
        score = strength / len(must) + 0.5 * said + 0.1 * len(must)
        made.append(
            Recognised(kind, found, matches, score - 0.5 * len(lacking), SHAPES[kind].words,
                       lacking, returns)
        )  # fmt: skip
    return made


def _versions(kind: str) -> Sequence[tuple[tuple[Role, ...], bool]]:
    roles = KINDS[kind]
    if kind not in ("prices", "benchmarks"):
        return ((roles, False),)
    as_returns = tuple(GIVEN_AS_RETURNS if role.name == "close" else role for role in roles)
    return ((roles, False), (as_returns, True))


@dataclass(frozen=True, slots=True)
class Sorted:
    """The tables of a folder by kind, and those left over with why."""

    by_kind: Mapping[str, Recognised] = field(default_factory=dict)
    left: tuple[tuple[Found, str], ...] = ()


def sort_tables(tables: Sequence[Found], *, priced: bool) -> Sorted:
    """Each table as what it fits best, one table a kind."""
    options = {at: recognise(found, priced=priced) for at, found in enumerate(tables)}
    ranked = sorted(
        ((item, at) for at, items in options.items() for item in items),
        key=lambda pair: (-pair[0].score, pair[1]),
    )
    by_kind: dict[str, Recognised] = {}
    placed: set[int] = set()
    for item, at in ranked:
        if item.kind not in by_kind and at not in placed:
            by_kind[item.kind] = _with_rival(item, options[at])
            placed.add(at)
    left = tuple(
        (found, why_not(found, options[at], by_kind))
        for at, found in enumerate(tables)
        if at not in placed
    )
    return Sorted(by_kind, left)


def _with_rival(best: Recognised, options: Sequence[Recognised]) -> Recognised:
    for other in options:
        if other.kind != best.kind and best.score - other.score < CLOSE_CALL:
            return Recognised(best.kind, best.found, best.matches, best.score, best.reason,
                              best.lacking, best.returns, other.kind)  # fmt: skip
    return best


def why_not(found: Found, options: Sequence[Recognised], taken: Mapping[str, Recognised]) -> str:
    """Why a table is not used, and what it would have to look like."""
    for item in options:
        if item.kind in taken:
            other = taken[item.kind].found.source.file
            return f"looks like {item.kind} as well, for which {other} fits better"
    _, series = series_of(found)
    if len(series) > 1:
        return _side_by_side(found, series)
    return "fits no table of a study: see the tables in README.md"


def _side_by_side(found: Found, series: Sequence[str]) -> str:
    first, value = series[0], value_of(found, series)
    return (
        f"one row a date and one column a series ({first} and {len(series) - 1} more); a study "
        f"reads one row a company and date with the columns security, date, {value} (prices), "
        f"one row an exchange and date with exchange, date, {value} (benchmarks), or exchange, "
        "date and one column a factor (factors): lay it out so, add the column that is missing, or "
        "head the columns with the codes that the deals use"
    )
