"""What one more unit of a variable goes with in the probability of a choice."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import special

from pipeline.core.prices import Floats
from pipeline.estimators.probit import LOG_ROOT_TWO_PI


@dataclass(frozen=True, slots=True)
class MarginalEffect:
    """Average change of the probability; ``step`` says per unit or from zero to one."""

    name: str
    effect: float
    std_error: float
    step: str


PER_UNIT, ZERO_TO_ONE = "one more unit", "from 0 to 1"


def average_effects(
    W: Floats, names: tuple[str, ...], gamma: Floats, covariance: Floats
) -> tuple[MarginalEffect, ...]:
    """Average marginal effects of a probit, errors by the delta method, constants left out.

    Mean over the A rows W (A, q) of φ(w'γ)γ_j, for a variable of zeros and ones of
    Φ(w'γ | 1) - Φ(w'γ | 0); ``covariance`` (q, q) is that of ``gamma`` (q,) (Greene 2018,
    sec. 17.3.2; Bartus 2005).
    """
    index = W @ gamma
    return tuple(
        _effect(W, index, at, name, gamma, covariance)
        for at, name in enumerate(names)
        if np.ptp(W[:, at]) > 0
    )


def _effect(
    W: Floats, index: Floats, at: int, name: str, gamma: Floats, covariance: Floats
) -> MarginalEffect:
    if set(np.unique(W[:, at]).tolist()) <= {0.0, 1.0}:
        without = index - W[:, at] * gamma[at]
        one, none = W.copy(), W.copy()
        one[:, at], none[:, at] = 1.0, 0.0
        effect = float(np.mean(special.ndtr(without + gamma[at]) - special.ndtr(without)))
        slope = (_density(without + gamma[at])[:, None] * one).mean(axis=0)
        slope -= (_density(without)[:, None] * none).mean(axis=0)
        step = ZERO_TO_ONE
    else:
        density = _density(index)
        effect = float(density.mean() * gamma[at])
        slope = -gamma[at] * ((index * density)[:, None] * W).mean(axis=0)
        slope[at] += density.mean()
        step = PER_UNIT
    return MarginalEffect(name, effect, float(np.sqrt(slope @ covariance @ slope)), step)


def _density(index: Floats) -> Floats:
    return np.asarray(np.exp(-0.5 * index**2 - LOG_ROOT_TWO_PI))
