"""Samples with known truth and a known flaw, for tests and simulations alike."""

from __future__ import annotations

import numpy as np

from pipeline.core.design import Design, SelectionRows

EFFECT = 0.5
RELIABILITY = 0.7
ANSWER = 0.3
"""What one unit of the outcome does to the choice in :func:`simultaneous`."""


def made(y: np.ndarray, D: np.ndarray, controls: np.ndarray, **parts: object) -> Design:
    """A constant, the treatment ``D`` and controls named x0, x1, ..."""
    n = len(y)
    controls = controls.reshape(n, -1)
    return Design(
        y=y,
        X=np.column_stack([np.ones(n), D, controls]),
        names=("constant", "D", *(f"x{at}" for at in range(controls.shape[1]))),
        treatment="D",
        rows=tuple(f"deal {at}" for at in range(n)),
        outcome="CAR",
        **parts,  # type: ignore[arg-type]
    )


def noisy_treatment(rng: np.random.Generator, n: int) -> Design:
    """D recorded with reliability .7 of a true regressor that moves with the control."""
    x = rng.normal(size=n)
    true = 0.6 * x + 0.8 * rng.normal(size=n)
    y = EFFECT * true + 0.4 * x + rng.normal(size=n)
    recorded = true + rng.normal(size=n) * np.sqrt(1 / RELIABILITY - 1)
    return made(y, recorded, x)


def misrecorded_choice(rng: np.random.Generator, n: int, missed: float, false: float) -> Design:
    """A true 0/1 choice that depends on the control, some of it recorded as the other."""
    x = rng.normal(size=n)
    true = 0.5 * x + rng.normal(size=n) > 0.2
    flip = np.where(true, rng.random(n) < missed, rng.random(n) < false)
    y = EFFECT * true + 0.4 * x + rng.normal(size=n)
    return made(y, np.where(flip, ~true, true).astype(float), x)


def hidden_choice(rng: np.random.Generator, n: int, rho: float) -> Design:
    """A 0/1 choice whose error correlates by ``rho`` with the outcome's."""
    x = rng.normal(size=n)
    v, w = rng.normal(size=(2, n))
    e = rho * v + np.sqrt(1 - rho**2) * w
    D = (0.7 * x + v > 0).astype(float)
    return made(EFFECT * D + 0.4 * x + e, D, x)


def hidden_announcers(rng: np.random.Generator, A: int, rho: float) -> Design:
    """Candidates of whom those announce whose error correlates by ``rho`` with the outcome's."""
    x, z, v, w = rng.normal(size=(4, A))
    e = rho * v + np.sqrt(1 - rho**2) * w
    selected = 0.5 * x + 0.8 * z + v > 0
    n = int(selected.sum())
    D = (rng.random(n) < 0.5).astype(float)
    y = EFFECT * D + 0.4 * x[selected] + e[selected]
    row = np.full(A, -1)
    row[selected] = np.arange(n)
    rows = SelectionRows(
        W=np.column_stack([np.ones(A), x, z]),
        names=("constant", "x0", "z"),
        excluded=("z",),
        selected=selected,
        outcome_row=row,
    )
    return made(y, D, x[selected], selection=rows)


def tainted_instrument(rng: np.random.Generator, n: int, direct: float) -> Design:
    """An instrument that reaches the outcome by ``direct`` besides through the treatment."""
    z, x, u = rng.normal(size=(3, n))
    D = 0.7 * z + 0.3 * x + u + rng.normal(size=n)
    y = EFFECT * D + direct * z + 0.4 * x - u + rng.normal(size=n)
    return made(y, D, x, Z=z[:, None], instruments=("z",))


def proportional(rng: np.random.Generator, n: int) -> Design:
    """A hidden factor that selects exactly as strongly as the one recorded."""
    w, hidden = rng.normal(size=(2, n))
    D = 0.4 * w + 0.4 * hidden + rng.normal(size=n)
    return made(EFFECT * D + w + hidden + 0.5 * rng.normal(size=n), D, w)


def confounded(rng: np.random.Generator, n: int) -> tuple[Design, np.ndarray]:
    """A hidden factor, handed over beside the design that lacks it."""
    x, hidden = rng.normal(size=(2, n))
    D = 0.4 * x + 0.5 * hidden + rng.normal(size=n)
    return made(EFFECT * D + 0.4 * x - 0.6 * hidden + rng.normal(size=n), D, x), hidden


def unequal_variances(rng: np.random.Generator, n: int) -> Design:
    """A common confounder of constant spread, a choice whose own noise moves with x."""
    x, u = rng.normal(size=(2, n))
    D = 0.5 * x + u + rng.normal(size=n) * np.exp(0.5 * x)
    return made(EFFECT * D + 0.3 * x + u + rng.normal(size=n), D, x)


def simultaneous(rng: np.random.Generator, n: int) -> Design:
    """y = .5D + .4x0 + .8x1 + .4x2 + ε and D = .3y + .4x0 + z + v, the errors correlated."""
    x0, x1, x2, z = rng.normal(size=(4, n))
    e, v = rng.multivariate_normal([0, 0], [[1, 0.5], [0.5, 1]], size=n).T
    right_y, right_d = 0.4 * x0 + 0.8 * x1 + 0.4 * x2 + e, 0.4 * x0 + z + v
    y = (right_y + EFFECT * right_d) / (1 - EFFECT * ANSWER)
    D = ANSWER * y + right_d
    return made(y, D, np.column_stack([x0, x1, x2]), Z=z[:, None], instruments=("z",))
