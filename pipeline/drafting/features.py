"""Which deal variables to ask about and to hold fixed, by rules that are written beside them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from pipeline.drafting.kinds import Recognised
from pipeline.drafting.likeness import likeness
from pipeline.drafting.lines import Line
from pipeline.drafting.signs import Signs
from pipeline.drafting.words import AFTERWARDS, CHOICES, OUTCOMES
from pipeline.inputs.contracts import READ
from pipeline.inputs.deal_checks import PERSONAL

FEWEST_A_GROUP = 5
ROWS = (10, 5)  # deals needed: 10 and 5 a coefficient, as the regression asks
MOST_CONTROLS = 8
FILLED = 0.8
SKEWED = 10.0
EXPLAINED = 0.9
REPEATED = 0.1
MOST_LEVELS = 30


@dataclass(frozen=True, slots=True)
class Choice:
    """The key feature: a column of 0 and 1, or a word of a column of words."""

    name: str
    reason: str
    others: tuple[str, ...] = ()
    column: str = ""
    word: str = ""


def numbers(deals: Recognised, name: str) -> np.ndarray:
    """(n,) cells of a column as numbers."""
    return READ["number"](deals.found.frame[name])[0].to_numpy(np.float64)


def choice_of(deals: Recognised, spare: Sequence[str]) -> Choice | None:
    """The feature asked about: by its name if one speaks of a choice, else the most even one."""
    signs = deals.found.signs
    flags = [name for name in spare if _two_groups(deals, signs[name])]
    ranked = sorted(
        flags, key=lambda name: (-likeness(name, CHOICES), _unevenness(deals, name), name)
    )
    words = [
        name
        for name in spare
        if signs[name].kind == "text" and 2 <= len(signs[name].levels) <= 4
        and likeness(name, CHOICES) > 0
    ]  # fmt: skip
    if words and not (ranked and likeness(ranked[0], CHOICES) == 1):
        return _by_word(deals, words[0], tuple(ranked))
    if not ranked:
        return None
    best = ranked[0]
    reason = f"'{best}' is 0 or 1 with at least {FEWEST_A_GROUP} deals of each"
    if likeness(best, CHOICES) > 0:
        reason += ", and its name speaks of something that is chosen."
    else:
        reason += ", the most even of such columns; no name speaks of a choice."
    return Choice(best, reason, tuple(ranked[1:]))


def _by_word(deals: Recognised, column: str, others: tuple[str, ...]) -> Choice | None:
    counts = deals.found.frame[column].astype(str).str.strip().value_counts()
    fit = [str(word) for word, n in counts.items()
           if FEWEST_A_GROUP <= n <= len(deals.found.frame) - FEWEST_A_GROUP]  # fmt: skip
    if not fit:
        return None
    word = min(fit, key=lambda item: abs(counts[item] / counts.sum() - 0.5))
    slug = "_".join(part for part in f"{column}_{word}".lower().split() if part)
    name = "".join(sign if sign.isalnum() or sign == "_" else "_" for sign in slug)
    return Choice(name, f"'{column}' says how the deal was paid or made; '{word}' is the most "
                  "even of its words.", others, column, word)  # fmt: skip


def _two_groups(deals: Recognised, signs: Signs) -> bool:
    if not signs.flag or likeness(signs.name, AFTERWARDS) > 0:
        return False
    values = numbers(deals, signs.name)
    ones = float(np.nansum(values))
    return min(ones, float(np.isfinite(values).sum()) - ones) >= FEWEST_A_GROUP


def _unevenness(deals: Recognised, name: str) -> float:
    return abs(float(np.nanmean(numbers(deals, name))) - 0.5)


def outcome_of(deals: Recognised) -> tuple[str, tuple[str, ...]]:
    """The column a ready list explains, by its name and shape, and others that would do."""
    fit = [
        name
        for name, signs in deals.found.signs.items()
        if (signs.kind == "number" and not signs.flag and not signs.unique | signs.whole)
        or (signs.kind == "number" and not signs.whole and signs.varies)
    ]  # fmt: skip
    ranked = sorted(fit, key=lambda name: (-likeness(name, OUTCOMES), name))
    told = [name for name in ranked if likeness(name, OUTCOMES) > 0]
    if not told:
        return "", tuple(ranked)
    best = likeness(told[0], OUTCOMES)
    return told[0], tuple(name for name in told[1:] if likeness(name, OUTCOMES) == best)


@dataclass(frozen=True, slots=True)
class Regressors:
    """Proposed controls, the characteristics they need, effects, and what was left out and why."""

    controls: tuple[str, ...]
    lines: tuple[Line, ...]
    left: tuple[tuple[str, str], ...]


def regressors_of(
    deals: Recognised, spare: Sequence[str], choice: Choice, measured: Sequence[str], room: int
) -> Regressors:
    """Controls by rule, as many as the number of deals allows.

    Args:
        deals: the deal list.
        spare: its columns that play no other part.
        choice: the key feature.
        measured: controls made from prices.
        room: controls that the number of deals leaves room for.
    """
    lines, left, taken = [], [], list(measured)
    basis = [np.ones(len(deals.found.frame))]
    basis.append(_feature(deals, choice))
    for name, source in _in_order(deals, spare):
        if name in (choice.name, choice.column):
            continue
        why = _unfit(deals, source)
        values = _made(deals, source)
        if not why and len(taken) >= min(room, MOST_CONTROLS + len(measured)):
            why = f"the number of deals leaves room for {room} controls"
        if not why and _explained(values, basis) > EXPLAINED:
            why = "the columns above tell nearly all of it"
        if why:
            left.append((name, why))
            continue
        basis.append(values)
        control, made = _characteristic(name, _in_study(deals, source), values)
        taken.append(control)
        lines += made
    return Regressors(tuple(taken), tuple(lines), tuple(left))


Source = tuple[str, ...]


def _in_study(deals: Recognised, source: Source) -> Source:
    """Columns as the study calls them: those that play a part by its name."""
    parts = {match.column: role for role, match in deals.matches.items()}
    return tuple(parts.get(column, column) for column in source)


def _in_order(deals: Recognised, spare: Sequence[str]) -> list[tuple[str, Source]]:
    """Size first, then the columns as they stand."""
    value, size = deals.column("deal_value"), deals.column("market_value")
    found: list[tuple[str, Source]] = []
    if value and size:
        found.append(("relative_size", (value, size)))
    if value or size:
        found.append(("log_size", (size or value,)))
    return found + [(name, (name,)) for name in spare if deals.found.signs[name].kind == "number"]


def _feature(deals: Recognised, choice: Choice) -> np.ndarray:
    if choice.column:
        words = deals.found.frame[choice.column].astype(str).str.strip()
        return (words == choice.word).to_numpy(np.float64)
    return numbers(deals, choice.name)


def _made(deals: Recognised, source: Source) -> np.ndarray:
    values = numbers(deals, source[0])
    return values / numbers(deals, source[1]) if len(source) > 1 else values


def _unfit(deals: Recognised, source: Source) -> str:
    signs = deals.found.signs[source[0]]
    if likeness(signs.name, AFTERWARDS) > 0:
        return "its name speaks of what came after the announcement"
    if signs.counted or (signs.unique and signs.whole):
        return "it counts or names the deals"
    if not signs.varies:
        return "it has one value"
    if signs.is_year:
        return "it is a year"
    if signs.filled < FILLED:
        return f"it is empty in {1 - signs.filled:.0%} of the deals"
    if PERSONAL.search(signs.name):
        return "its name speaks of a person"
    return ""


def _explained(values: np.ndarray, basis: Sequence[np.ndarray]) -> float:
    """R² of a column on those taken so far, on rows that have all of them."""
    X = np.column_stack(basis)
    known = np.isfinite(values) & np.isfinite(X).all(axis=1)
    y, X = values[known], X[known]
    if len(y) <= X.shape[1] + 1 or float(y.std()) == 0:
        return 1.0
    rest = y - X @ np.linalg.lstsq(X, y, rcond=None)[0]
    return 1.0 - float(rest @ rest) / float(((y - y.mean()) ** 2).sum())


def _characteristic(name: str, source: Source, values: np.ndarray) -> tuple[str, list[Line]]:
    """The control's name, and the lines that make it where the cells are very unequal amounts."""
    known = values[np.isfinite(values)]
    section = f"characteristics.{name}"
    skewed = known.min() > 0 and known.max() > SKEWED * float(np.median(known))
    if len(source) > 1:
        return name, [
            Line(section, "ratio", list(source), "Size of the deal beside that of the company."),
            Line(section, "log", bool(known.min() > 0)),
            Line(section, "winsorise", 0.01, "The most extreme hundredth at each end set to it."),
        ]
    if known.min() <= 0 or (name == source[0] and not skewed):
        return source[0], []
    own = name if name != source[0] else f"log_{name}"
    reason = f"Amounts from {known.min():,.4g} to {known.max():,.4g}: in logarithms."
    section = f"characteristics.{own}"
    return own, [Line(section, "column", source[0], reason), Line(section, "log", True)]


def groups_of(deals: Recognised, spare: Sequence[str]) -> tuple[str, ...]:
    """At most one column of words whose groups hold enough deals each, for fixed effects."""
    rows = len(deals.found.frame)
    found = []
    for name in spare:
        signs = deals.found.signs[name]
        words = signs.kind == "text" and not signs.code and not signs.trouble
        if words and 2 <= len(signs.levels) <= min(MOST_LEVELS, rows // 10) and signs.filled == 1:
            found.append(name)
    return tuple(found[:1])


def repeated_company(deals: Recognised) -> bool:
    """Whether companies have several deals often enough for errors to be shared within them."""
    column = deals.column("security")
    if not column:
        return False
    counts = deals.found.frame[column].astype(str).value_counts()
    return len(counts) >= 10 and bool((counts > 1).mean() > REPEATED)
