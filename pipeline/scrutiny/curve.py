"""The specification curve as a whole: how it lies, and whether chance would lay it so."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from pipeline.core.multiplicity import Adjusted, adjusted
from pipeline.core.prices import Floats
from pipeline.estimators.absorb import demean
from pipeline.estimators.algebra import partial_out
from pipeline.scrutiny.grid import Grid, Summary
from pipeline.scrutiny.multiplicity import score_draws

SIGNIFICANCE = 0.05


def summary(grid: Grid) -> Summary:
    """The curve in numbers; the first cell is the headline's.

    Raises:
        ValueError: if the first cell has no answer.
    """
    values = np.array([cell.estimate for cell in grid.cells])
    p = np.array([cell.p_value for cell in grid.cells])
    if not np.isfinite(values[0]):
        raise ValueError(f"the first cell has no estimate: {grid.cells[0].reason}")
    alive = np.isfinite(values)
    same = np.sign(values[alive]) == np.sign(values[0])
    return Summary(
        cells=int(alive.sum()),
        failed=int((~alive).sum()),
        median=float(np.median(values[alive])),
        low=float(values[alive].min()),
        high=float(values[alive].max()),
        same_sign=float(same.mean()),
        significant=float((same & (p[alive] < SIGNIFICANCE)).mean()),
    )


def with_permutations(grid: Grid, found: Summary, draws: int, seed: int) -> Summary:
    """The summary with p-values of the whole curve, its least-squares cells taken together.

    The treatment is dealt out anew among the deals ``draws`` times, the same way in every cell,
    and the curve drawn again; p is the share of curves, this one included, that lie as far out
    in the median, in the share with the sign of the curve's median, and in the share with that
    sign and |t| above 1.96 in HC1 errors (Simonsohn, Simmons and Nelson 2020, sec. 3). The null is
    that the treatment does nothing in any deal and is unrelated to the controls.
    """
    rng = np.random.default_rng(seed)
    n = len(grid.blocks[0].kept)
    orders = np.array([rng.permutation(n) for _ in range(draws)])
    whole = np.zeros(n)
    for block in grid.blocks:
        whole[block.kept] = block.D
    seen = np.any([block.kept for block in grid.blocks], axis=0)
    treatments = np.empty((n, draws + 1))
    treatments[:, 0] = whole
    place = np.flatnonzero(seen)
    for draw, order in enumerate(orders, start=1):
        shuffled = place[np.argsort(order[place], kind="stable")]
        treatments[:, draw] = whole
        treatments[place, draw] = whole[shuffled]
    parts = [_cells(block.controls, block.Y, treatments[block.kept], block.effects)
             for block in grid.blocks]  # fmt: skip
    estimates = np.vstack([b for b, _ in parts])
    statistics = np.vstack([t for _, t in parts])
    median = np.median(estimates, axis=0)
    signs = np.where(median >= 0, 1.0, -1.0)
    same = (np.sign(estimates) == signs).mean(axis=0)
    significant = ((np.sign(estimates) == signs) & (np.abs(statistics) > 1.96)).mean(axis=0)
    return replace(
        found,
        p_median=_share(np.abs(median)),
        p_same_sign=_share(same),
        p_significant=_share(significant),
    )


def _share(values: Floats) -> float:
    """Share of ``values`` (draws + 1,) at least as large as the first, itself included."""
    return float((values >= values[0] * (1 - 1e-12)).mean())


def _cells(
    controls: Floats, Y: Floats, treatments: Floats, effects: dict[str, np.ndarray]
) -> tuple[Floats, Floats]:
    """(c, draws) coefficients and HC1 t of outcomes Y (m, c) on each treatment (m, draws)."""
    D = demean(treatments, effects) if effects else treatments
    left = partial_out(D, controls)
    size = np.sum(left**2, axis=0)
    size = np.where(size > 0, size, np.nan)
    b = Y.T @ left / size
    # Σd²(y - bd)² without a third dimension: three products of the powers.
    squares = left**2
    spread = (
        (Y**2).T @ squares - 2 * b * (Y.T @ (squares * left)) + b**2 * np.sum(squares**2, axis=0)
    )
    m, k = Y.shape[0], controls.shape[1] + 1
    error = np.sqrt(np.maximum(spread, 0.0) * m / (m - k)) / size
    return np.asarray(b), np.asarray(b / np.where(error > 0, error, np.nan))


def adjusted_cells(grid: Grid, draws: int, seed: int) -> tuple[tuple[int, ...], Adjusted]:
    """p-values of the cells that allow for all cells, and which cells they are.

    Romano and Wolf's with one random sign a cluster for all cells; Holm's and Benjamini and
    Hochberg's beside it. Cells without an answer or without influences are not among them.
    """
    usable = tuple(
        at
        for at, cell in enumerate(grid.cells)
        if np.isfinite(cell.p_value) and grid.influence[:, at].any()
    )
    raw = np.array([grid.cells[at].p_value for at in usable])
    t = np.array([grid.cells[at].estimate / grid.cells[at].std_error for at in usable])
    resampled = score_draws(grid.influence[:, list(usable)], grid.clusters, draws, seed)
    return usable, adjusted(raw, t, resampled)
