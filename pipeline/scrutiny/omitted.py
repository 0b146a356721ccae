"""What leaving a control out does, and what that says of one nobody recorded (Oster 2019)."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from scipy import special

from pipeline.core.estimate import t_reach
from pipeline.core.prices import Floats, Integers
from pipeline.estimators.algebra import partial_out, solve
from pipeline.scrutiny.ground import Ground, varying

CITATION = "Oster (2019)"
REAL = 1e-7
"""Share of its size below which the imaginary part of a root is rounding."""


@dataclass(frozen=True, slots=True)
class LeftOut:
    """One control left out: short = long + delta·gamma, exactly.

    The omitted-variables formula (Angrist and Pischke 2009, sec. 3.2.2).

    ``gamma`` is the control's coefficient in the long regression, ``delta`` the treatment's in
    the regression of the control on treatment and other controls; ``gap`` is what the identity
    fails by, rounding only.
    """

    control: str
    short: float
    long: float
    gamma: float
    delta: float

    @property
    def gap(self) -> float:
        """short - long - delta·gamma."""
        return self.short - self.long - self.delta * self.gamma


def left_out(ground: Ground) -> tuple[LeftOut, ...]:
    """Each varying control left out in turn."""
    full = np.column_stack([ground.D, ground.W])
    long = solve(full, ground.y)[0]
    found = []
    for name in varying(ground):
        column = 1 + ground.names.index(name)
        others = np.delete(full, column, axis=1)
        both = solve(others, np.column_stack([ground.y, full[:, column]]))[0][0]
        found.append(
            LeftOut(name, float(both[0]), float(long[0]), float(long[column]), float(both[1]))
        )
    return tuple(found)


@dataclass(frozen=True, slots=True)
class Movement:
    """What the controls did to the effect: the only facts Oster's formulas use.

    Attributes:
        short, short_r2: effect and R² without the controls; long, long_r2: with them.
        outcome_variance, treatment_variance: of outcome and treatment about their means (or
            within the fixed effects, the R² then too).
        rest: variance of what the controls leave of the treatment.
    """

    short: float
    short_r2: float
    long: float
    long_r2: float
    outcome_variance: float
    treatment_variance: float
    rest: float


def movement_of(ground: Ground) -> Movement:
    """The movement when all varying controls come in at once; constant and effects stay."""
    changes = np.ptp(ground.W, axis=0) > 0
    both = partial_out(np.column_stack([ground.y, ground.D]), ground.W[:, ~changes])
    centred = np.column_stack([both, partial_out(ground.W[:, changes], ground.W[:, ~changes])])
    return movement_from(centred.T @ centred / ground.n)


def movement_from(moments: Floats) -> Movement:
    """The movement from centred second moments (p, p) of outcome, treatment and controls."""
    yy, dd = float(moments[0, 0]), float(moments[1, 1])
    short = float(moments[0, 1]) / dd
    b = np.linalg.solve(moments[1:, 1:], moments[1:, 0])
    explained = float(b @ moments[1:, 0])
    rest = 1.0 / float(np.linalg.inv(moments[1:, 1:])[0, 0])
    return Movement(short, short**2 * dd / yy, float(b[0]), explained / yy, yy, dd, rest)


def delta(m: Movement, r_max: float, effect: float = 0.0) -> float:
    """How strong selection on the unrecorded must be, next to the recorded, for ``effect``.

    One means as strong as the controls together. Exact, Oster (2019), proposition 3; infinite if
    no strength does it. ``r_max`` is the R² of a regression with nothing left out.
    """
    b, v = m.short - m.long, m.long - effect
    gained = (m.long_r2 - m.short_r2) * m.outcome_variance * m.rest
    missing = (r_max - m.long_r2) * m.outcome_variance
    s, t = m.treatment_variance, m.rest
    cube = v**3 * (t * s - t * t)
    above = v * gained + v * s * t * b * b + 2 * v * v * t * b * s + cube
    below = missing * b * s + v * missing * (s - t) + v * v * t * b * s + cube
    return above / below if below != 0 else float("inf")


@dataclass(frozen=True, slots=True)
class Adjusted:
    """Effects consistent with a strength of selection: the one chosen and all of them.

    ``same_side`` is false when no root lies on the side the controls moved the effect to, so
    that the nearest one had to be taken.
    """

    effect: float
    roots: tuple[float, ...]
    same_side: bool


def adjusted_effect(m: Movement, r_max: float, strength: float = 1.0) -> Adjusted:
    """The effect if selection on the unrecorded is ``strength`` times that on the recorded.

    Real roots v of Oster's (2019) cubic, a quadratic at strength 1; the effect is long - v. Of
    several roots, the one on the side to which the controls moved the effect and nearest to the
    controlled estimate; all are returned.
    """
    b, s, t = m.short - m.long, m.treatment_variance, m.rest
    gained = (m.long_r2 - m.short_r2) * m.outcome_variance * t
    missing = (r_max - m.long_r2) * m.outcome_variance
    cubic = [
        (strength - 1) * (t * s - t * t),
        (strength - 2) * t * s * b,
        strength * missing * (s - t) - gained - s * t * b * b,
        strength * missing * b * s,
    ]
    roots = np.roots(np.trim_zeros(cubic, "f"))
    size = np.maximum(np.abs(roots), 1e-300)
    real = roots[np.abs(roots.imag) <= REAL * size].real
    if not len(real):
        return Adjusted(float("nan"), (), False)
    order = real[np.argsort(np.abs(real))]
    # β* - β̃ = -v has the sign of β̃ - β° = -b.
    same = order[order * b > 0]
    chosen = same[0] if len(same) else order[0]
    on_side = bool(len(same)) or b == 0 or strength == 0 or missing == 0
    return Adjusted(float(m.long - chosen), tuple(float(m.long - v) for v in order), on_side)


def approximate_effect(m: Movement, r_max: float, strength: float = 1.0) -> float:
    """β̃ - δ(β° - β̃)(R_max - R̃)/(R̃ - R°): right only under equal relative contributions.

    Oster (2019); shown beside the exact effect, from which it may be far.
    """
    gained = m.long_r2 - m.short_r2
    return m.long - strength * (m.short - m.long) * (r_max - m.long_r2) / gained


R_MAX = {"1.3 times the R²": (1.3, 0.0), "twice the R²": (2.0, 0.0), "the R² plus .25": (1.0, 0.25)}
"""Largest R² worth showing, in words: how many times the R² with the controls, and how much more.

1.3 times is Oster's (2019) convention; at the R² of return regressions it asks for little.
"""


def largest_r2(long_r2: float, rule: tuple[float, float]) -> float:
    """The largest R² by a rule as in :data:`R_MAX`, at most 1."""
    return min(rule[0] * long_r2 + rule[1], 1.0)


def r_max_grid(m: Movement) -> dict[str, float]:
    """The largest R² by each rule of :data:`R_MAX`."""
    return {name: largest_r2(m.long_r2, rule) for name, rule in R_MAX.items()}


def resampled_effects(
    ground: Ground,
    codes: Integers,
    rules: Mapping[str, tuple[float, float]],
    draws: int,
    seed: int,
) -> dict[str, Floats]:
    """(draws,) adjusted effects at strength 1 by each rule for the largest R², clusters resampled.

    ``codes`` (n,) names the cluster of each row; ``rules`` are as in :data:`R_MAX` and applied to
    the R² of each draw. Pairs bootstrap by weights (Efron and Tibshirani 1993).
    """
    changes = np.ptp(ground.W, axis=0) > 0
    fixed = ground.W[:, ~changes]
    whole = np.column_stack([ground.y, ground.D, ground.W[:, changes], fixed])
    groups = int(codes.max()) + 1
    products = np.zeros((groups, whole.shape[1], whole.shape[1]))
    np.add.at(products, codes, whole[:, :, None] * whole[:, None, :])
    rng = np.random.default_rng(seed)
    weights = rng.multinomial(groups, np.full(groups, 1 / groups), size=draws).astype(float)
    totals = np.tensordot(weights, products, axes=1)
    p = whole.shape[1] - fixed.shape[1]
    found: dict[str, list[float]] = {name: [] for name in rules}
    for total in totals:
        inner = total[:p, :p]
        if p < len(total):
            inner = inner - total[:p, p:] @ np.linalg.solve(total[p:, p:], total[p:, :p])
        m = movement_from(inner / ground.n)
        for name, rule in rules.items():
            found[name].append(adjusted_effect(m, largest_r2(m.long_r2, rule)).effect)
    return {name: np.array(values) for name, values in found.items()}


def resampled_interval(
    effect: float, draws: Floats, df: float, level: float
) -> tuple[float, float]:
    """``effect`` plus and minus t times the spread of its resampled values (B,).

    The spread is half the distance between the 16th and 84th percentiles, which a draw whose root
    jumps does not stretch. In simulations its coverage is nearer the nominal than that of
    percentiles or bias-corrected percentiles, and a little below it.
    """
    low, high = np.nanquantile(draws, special.ndtr(np.array([-1.0, 1.0])))
    half = t_reach(level, df) * float(high - low) / 2
    return effect - half, effect + half
