"""Bounds within cells: by hand, against the plain bounds, and their resampled errors."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from pipeline.core.design import Design, FitOptions, SelectionRows
from pipeline.core.estimate import EstimationFailed
from pipeline.estimators.bounds import bounds_of
from pipeline.estimators.bounds_in_cells import (
    WITHOUT,
    Listed,
    range_of,
    redrawn,
    trimming_bounds,
)


def listed(seed: int, A: int = 600, lift: float = 0.15) -> Listed:
    rng = np.random.default_rng(seed)
    D = rng.random(A) < 0.5
    cells = rng.integers(0, 3, size=A)
    seen = rng.random(A) < 0.55 + 0.1 * cells + lift * D
    y = 0.3 * D + cells + rng.normal(size=A)
    return Listed(y, D, seen, cells, np.arange(A))


def together(rows: Listed) -> Listed:
    return replace(rows, cells=np.zeros_like(rows.cells))


def design_of(rows: Listed) -> Design:
    seen, n = rows.seen, int(rows.seen.sum())
    selection = SelectionRows(
        W=np.column_stack([np.ones(len(rows.D)), rows.D]).astype(float),
        names=("constant", "treatment"),
        excluded=(),
        selected=seen,
        outcome_row=np.where(seen, np.cumsum(seen) - 1, -1),
    )
    return Design(
        y=rows.y[seen],
        X=np.column_stack([np.ones(n), rows.D[seen]]).astype(float),
        names=("constant", "treatment"),
        treatment="treatment",
        rows=tuple(map(str, range(n))),
        outcome="CAR",
        selection=selection,
    )


@pytest.mark.parametrize("seed", range(4))
@pytest.mark.parametrize("lift", [0.15, -0.2])
def test_one_cell_is_lee(seed: int, lift: float) -> None:
    rows = together(listed(seed, lift=lift))
    found, plain = range_of(rows), bounds_of(rows.y, rows.D, rows.seen)
    assert (found.lower, found.upper) == pytest.approx((plain.lower, plain.upper), rel=1e-12)
    assert found.trimmed == pytest.approx(plain.trimmed)
    assert found.treated == plain.treated_trimmed


def test_two_cells_by_hand() -> None:
    """Cell 0: 4 of 4 treated seen against 2 of 4; half of 1, 2, 3, 4 is set aside. Cell 1: 2 of 2
    on both sides, nothing is. Weights 2 and 2, the deals seen without the treatment."""
    y = np.array([1.0, 2, 3, 4, 0, 0, 9, 9, 10, 12, 6, 8])
    D = np.array([1, 1, 1, 1, 0, 0, 0, 0, 1, 1, 0, 0], dtype=bool)
    seen = np.array([1, 1, 1, 1, 1, 1, 0, 0, 1, 1, 1, 1], dtype=bool)
    cells = np.repeat([0, 1], [8, 4])
    found = range_of(Listed(y, D, seen, cells, np.arange(12)))
    # Cell 0: 1.5 - 0 and 3.5 - 0. Cell 1: 11 - 7 = 4.
    assert (found.lower, found.upper) == pytest.approx(((1.5 + 4) / 2, (3.5 + 4) / 2))
    assert found.trimmed == pytest.approx(0.25)


def test_cells_that_tell_outcomes_apart_tighten() -> None:
    rows = listed(3, A=20_000)
    inner, outer = range_of(rows), range_of(together(rows))
    assert inner.upper - inner.lower < 0.8 * (outer.upper - outer.lower)
    assert inner.lower < 0.3 < inner.upper


def test_resampled_errors_are_near_those_by_influence() -> None:
    rows = together(listed(5))
    influence = bounds_of(rows.y, rows.D, rows.seen).influence
    analytic = np.sqrt((influence**2).sum(axis=0))[1:]
    # 999 draws leave 2.2% of error in a standard deviation.
    np.testing.assert_allclose(redrawn(rows, 999, 1).std(axis=0, ddof=1), analytic, rtol=0.15)


def test_same_seed_same_draws_and_groups_stay_whole() -> None:
    rows = listed(6, A=200)
    assert redrawn(rows, 50, 7).tobytes() == redrawn(rows, 50, 7).tobytes()
    doubled = Listed(*(np.repeat(part, 2) for part in (
        rows.y, rows.D, rows.seen, rows.cells, rows.groups)))  # fmt: skip
    one, two = redrawn(rows, 200, 7), redrawn(doubled, 200, 7)
    # Each deal written twice, drawn as one: nothing new is known.
    np.testing.assert_allclose(two.std(axis=0), one.std(axis=0), rtol=0.1)


def test_rows_of_the_table() -> None:
    rows = listed(8)
    found = trimming_bounds(design_of(rows), rows.cells, ("size",), FitOptions(), 199)
    assert [row.version for row in found] == [WITHOUT, WITHOUT, "Within cells of size"]
    first, second, third = found
    assert (first.lower, first.upper) == pytest.approx((second.lower, second.upper))
    assert (third.cells, first.cells) == (3, 1)
    for row in found:
        assert row.ci_low < row.lower <= row.upper < row.ci_high
        assert row.lower <= row.difference <= row.upper or row is third
        assert (row.deals, row.seen) == (len(rows.D), int(rows.seen.sum()))
    assert "influence" in first.interval
    assert "resampling" in second.interval


def test_a_thin_cell_has_a_reason() -> None:
    rows = listed(9)
    cells = np.zeros_like(rows.cells)
    cells[0] = 1
    with pytest.raises(EstimationFailed, match="fewer than two"):
        range_of(replace(rows, cells=cells))
    found = trimming_bounds(design_of(rows), cells, ("size",), FitOptions(), 99)
    assert "fewer than two deals" in found[-1].reason
    assert np.isnan(found[-1].lower)
    assert np.isfinite(found[0].lower)
