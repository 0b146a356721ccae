"""Invented deals of which two features are chosen, moved by four instruments."""

from __future__ import annotations

import numpy as np

from pipeline.core.design import Design

EFFECTS = (-0.02, 0.01)


def two_chosen(
    seed: int = 7, n: int = 420, groups: int = 24, strength: float = 0.6, L: int = 4
) -> Design:
    """Two endogenous variables, two controls, industry and year effects, uneven acquirers.

    Payment and size share a reason with the return; the instruments do not. Acquirers share
    shocks to everything and have very uneven numbers of deals.
    """
    rng = np.random.default_rng(seed)
    share = rng.dirichlet(np.full(groups, 0.8))
    firm = np.concatenate(
        [np.repeat(np.arange(groups), 2), rng.choice(groups, n - 2 * groups, p=share)]
    )
    industry, year = rng.integers(0, 8, size=n), rng.integers(0, 6, size=n)

    def shock(*shape: int) -> np.ndarray:
        return np.asarray(
            rng.normal(size=(n, *shape)) + 0.6 * rng.normal(size=(groups, *shape))[firm]
        )

    Z, x, reason = shock(L), shock(2), shock()
    weights = strength * rng.uniform(0.5, 1.0, size=(L, 2)) * [1.0, -1.0] ** np.arange(L)[:, None]
    chosen = Z @ weights + 0.3 * x + reason[:, None] * [1.0, 0.6] + shock(2)
    y = chosen @ np.array(EFFECTS) + 0.01 * x[:, 0] + 0.02 * reason + 0.002 * industry
    y = y + 0.02 * shock() * (1 + 0.3 * np.abs(x[:, 1]))
    return Design(
        y=y,
        X=np.column_stack([np.ones(n), chosen, 1e4 * x[:, 0], x[:, 1]]),
        names=("constant", "paid_in_shares", "relative_size", "cash", "run_up"),
        treatment="paid_in_shares",
        rows=tuple(f"deal {at}" for at in range(n)),
        outcome="CAR[-1, +1]",
        effects={"industry": industry, "year": year},
        clusters={"acquirer": firm},
        Z=Z,
        instruments=tuple(f"reason {at}" for at in range(L)),
        also_endogenous=("relative_size",),
    )
