"""Which way a suspected flaw pushes: signs declared by the analyst, the bias by rule."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

from pipeline.core.scrutiny import Direction
from pipeline.estimators.algebra import refusal

SIGNS = ("+", "-", "0", "?")


@dataclass(frozen=True, slots=True)
class Suspect:
    """A factor nobody recorded, as the analyst argues it.

    ``on_outcome`` is the sign of its effect on the outcome, treatment and controls held fixed;
    ``on_treatment`` the sign of its covariance with the treatment given the controls. One of
    ``+``, ``-``, ``0`` and ``?``.
    """

    factor: str
    on_outcome: str
    on_treatment: str
    evidence: str = ""


def direction_of(suspect: Suspect, estimate: float) -> Direction:
    """The sign of the least-squares bias, the product of the two, and what it does to the effect.

    The omitted-variables formula (Angrist and Pischke 2009, sec. 3.2.2). ``estimate`` is the
    least-squares effect.

    Raises:
        InputProblem: ``suspect_sign``.
    """
    for sign in (suspect.on_outcome, suspect.on_treatment):
        if sign not in SIGNS:
            raise refusal(
                "suspect_sign", suspect.factor, f"'{sign}'", "one of + - 0 ?", "give a sign"
            )
    bias = _product(suspect.on_outcome, suspect.on_treatment)
    return Direction(
        suspect.factor,
        suspect.on_outcome,
        suspect.on_treatment,
        bias,
        _words(bias, estimate),
        suspect.evidence,
    )


def _product(first: str, second: str) -> str:
    if "0" in (first, second):
        return "0"
    if "?" in (first, second):
        return "?"
    return "+" if first == second else "-"


def _words(bias: str, estimate: float) -> str:
    if bias == "0":
        return "as estimated"
    if bias == "?":
        return "not known"
    side = "below" if bias == "+" else "above"
    against = (bias == "+") == (estimate > 0)
    size = "smaller, or of the other sign" if against else "larger in size"
    return f"{side} the estimate: {size}"


def directions_of(suspects: Iterable[Suspect], estimate: float) -> tuple[Direction, ...]:
    """One direction a suspect, in order."""
    return tuple(direction_of(suspect, estimate) for suspect in suspects)
