"""Invented deals with known truth, for every estimator at once."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from pipeline.core.design import Design, SelectionRows
from pipeline.core.prices import Floats

EFFECT = -0.02
NAMES = ("constant", "paid_in_shares", "relative_size", "run_up", "leverage")
SELECTION_NAMES = ("constant", "size", "leverage", "divisions_for_sale", "listed_for")


def deals(seed: int = 11, candidates: int = 520) -> Design:
    """A design with fixed effects, two cluster dimensions, two instruments and candidates.

    About half of the candidates announce. Shares are chosen partly for a reason that also moves
    the return; the two instruments do not share that reason.
    """
    rng = np.random.default_rng(seed)
    A = candidates
    leverage, size = rng.normal(size=(2, A))
    firm = rng.integers(0, A // 5, size=A)
    firm_shock = rng.normal(size=A // 5)
    columns = [np.ones(A), size, leverage, rng.normal(size=A), rng.integers(0, 2, size=A)]
    W = np.column_stack(columns).astype(float)
    v = rng.normal(size=A)
    selected = W @ np.array([-0.1, 0.3, -0.2, 0.8, 0.2]) + v > 0
    n = int(selected.sum())
    order = rng.permutation(n)
    outcome_row = np.full(A, -1)
    outcome_row[selected] = order
    back = np.flatnonzero(selected)[np.argsort(order)]
    reason = rng.normal(size=n)
    Z = np.column_stack([rng.normal(size=n), rng.integers(0, 2, size=n)]).astype(float)
    shares = (0.8 * Z[:, 0] + 0.7 * Z[:, 1] + reason + rng.normal(size=n) > 0.4).astype(float)
    industry, year = rng.integers(0, 9, size=n), rng.integers(0, 6, size=n)
    x = np.column_stack([np.ones(n), shares, rng.normal(size=n), rng.normal(size=n)])
    x = np.column_stack([x, leverage[back]])
    y = x @ np.array([0.01, EFFECT, -0.01, 0.005, 0.004]) + 0.003 * industry - 0.002 * year
    y = y + 0.02 * reason + 0.01 * v[back] + 0.02 * firm_shock[firm[back]]
    y = y + 0.03 * rng.normal(size=n) * (1 + shares)
    return Design(
        y=y,
        X=x,
        names=NAMES,
        treatment="paid_in_shares",
        rows=tuple(f"deal {at}" for at in range(n)),
        outcome="CAR[-1, +1]",
        effects={"industry": industry, "year": year},
        clusters={"acquirer": firm[back], "month": year * 12 + rng.integers(0, 12, size=n)},
        Z=Z,
        instruments=("treasury_shares", "fast_placement"),
        selection=SelectionRows(
            W=W,
            names=SELECTION_NAMES,
            excluded=("divisions_for_sale", "listed_for"),
            selected=selected,
            outcome_row=outcome_row,
            clusters={"acquirer": firm},
        ),
    )


def one_cluster_dimension(design: Design) -> Design:
    """The design clustered by acquirer alone."""
    return replace(design, clusters={"acquirer": design.clusters["acquirer"]})


def without(design: Design, *parts: str) -> Design:
    """The design without its ``effects``, ``clusters`` or ``selection``."""
    nothing: dict[str, object] = {"effects": {}, "clusters": {}, "selection": None}
    return replace(design, **{part: nothing[part] for part in parts})  # type: ignore[arg-type]


def with_instruments(design: Design, *columns: int) -> Design:
    """The design with these of its instruments only."""
    return replace(
        design,
        Z=design.Z[:, list(columns)],
        instruments=tuple(design.instruments[at] for at in columns),
    )


def with_column(design: Design, name: str, values: Floats) -> Design:
    """The design with one more control."""
    return replace(design, X=np.column_stack([design.X, values]), names=(*design.names, name))


def measured(design: Design, seed: int = 12) -> Design:
    """The design with a known and uneven measurement error of each outcome."""
    spread = np.random.default_rng(seed).uniform(0.01, 0.04, size=design.n)
    return replace(design, outcome_variance=spread**2)


def in_percent(design: Design) -> Design:
    """The same deals with the outcome, and its measurement error, in percent."""
    variance = design.outcome_variance
    return replace(
        design, y=100 * design.y, outcome_variance=None if variance is None else 1e4 * variance
    )


def shuffled(design: Design, seed: int = 5) -> Design:
    """The same deals and the same candidates, each in another order."""
    rng = np.random.default_rng(seed)
    order = rng.permutation(design.n)
    place = np.empty(design.n, dtype=int)
    place[order] = np.arange(design.n)
    selection, variance = design.selection, design.outcome_variance
    if selection is not None:
        turn = rng.permutation(len(selection.selected))
        row = selection.outcome_row
        moved = np.where(row >= 0, place[np.maximum(row, 0)], -1)
        selection = replace(
            selection,
            W=selection.W[turn],
            selected=selection.selected[turn],
            outcome_row=moved[turn],
            clusters={k: c[turn] for k, c in selection.clusters.items()},
        )
    return replace(
        design,
        y=design.y[order],
        X=design.X[order],
        Z=design.Z[order],
        outcome_variance=None if variance is None else variance[order],
        rows=tuple(design.rows[at] for at in order),
        effects={k: c[order] for k, c in design.effects.items()},
        clusters={k: c[order] for k, c in design.clusters.items()},
        selection=selection,
    )


def arrays(design: Design) -> list[np.ndarray]:
    """Every array the design holds."""
    found: list[np.ndarray] = [design.y, design.X, design.Z]
    found += [*design.effects.values(), *design.clusters.values()]
    if design.outcome_variance is not None:
        found.append(design.outcome_variance)
    if design.selection is not None:
        s = design.selection
        found += [s.W, s.selected, s.outcome_row, *s.clusters.values()]
    return found
