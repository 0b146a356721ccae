"""Replications of both steps: refits one by one, the same numbers from any number of processes."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import special, stats

from pipeline.core.design import Design, FitOptions, SelectionRows
from pipeline.core.estimate import EstimationFailed
from pipeline.core.findings import InputProblem
from pipeline.estimators import batched_probit as batched
from pipeline.estimators import selection_bootstrap as boot
from pipeline.estimators.probit import Equation, ProbitFit, fit_probit, mills
from pipeline.estimators.selection import heckman_two_step
from tests.estimators.designs import deals

SEED = 3


def parts(design: Design) -> tuple[SelectionRows, Equation, ProbitFit]:
    rows = design.selection
    assert rows is not None
    equation = Equation(rows.selected, rows.W, rows.names, "announcing", rows.names[-1])
    return rows, equation, fit_probit(equation)


def resampled(design: Design, draws: int, workers: int = 1) -> boot.Resampled:
    rows, equation, first = parts(design)
    return boot.bootstrap_both_steps(design, rows, first, equation, draws, SEED, workers)


def drawn_rows(design: Design, draws: int) -> list[np.ndarray]:
    """The candidates of each replication of the first block, drawn anew."""
    rows, _, _ = parts(design)
    codes = rows.clusters["acquirer"]
    groups = int(codes.max()) + 1
    (seed,) = np.random.SeedSequence(SEED).spawn(1)
    picks = np.random.default_rng(seed).integers(0, groups, size=(draws, groups))
    return [np.repeat(np.arange(len(codes)), np.bincount(p, minlength=groups)[codes])
            for p in picks]  # fmt: skip


def test_replications_are_refits_of_the_rows_drawn() -> None:
    design = deals()
    rows, equation, first = parts(design)
    found = resampled(design, 40)
    assert (found.asked, found.failed, found.clusters) == (40, 0, "acquirer")
    error = np.sqrt(np.diag(first.information))
    spread = found.errors()
    for at, drawn in enumerate(drawn_rows(design, 40)):
        chosen, W = rows.selected[drawn], rows.W[drawn]
        alone = fit_probit(replace(equation, chosen=chosen, W=W))
        # The stated accuracy is a ten-thousandth of a standard error.
        assert np.abs((found.first[at] - alone.coefficients) / error).max() < 1e-4
        a = W[chosen] @ alone.coefficients
        ratio = stats.norm.pdf(a) / stats.norm.cdf(a)
        place = rows.outcome_row[drawn[chosen]]
        b = np.linalg.lstsq(np.column_stack([design.X[place], ratio]), design.y[place])[0]
        assert np.abs((found.second[at] - b) / spread).max() < 1e-4


def test_same_bytes_from_one_process_and_two(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(boot, "AT_ONCE", 25)
    design = deals()
    one, two = resampled(design, 75, 1), resampled(design, 75, 2)
    assert one.second.tobytes() == two.second.tobytes()
    assert one.first.tobytes() == two.first.tobytes()


def test_point_is_the_two_step_estimate_and_errors_are_near_its_own() -> None:
    design = deals()
    found = resampled(design, 999)
    column = heckman_two_step(design, FitOptions(cluster=True))
    np.testing.assert_allclose(found.point, column.coefficients, rtol=1e-8)
    # 999 draws leave 2.2% of error in a standard deviation; the two also differ in 1/G.
    np.testing.assert_allclose(found.errors(), column.std_errors, rtol=0.15)
    low, high = found.intervals(0.95).T
    assert (low < found.point).all()
    assert (high > found.point).all()


def test_failed_probits_are_left_out_and_counted() -> None:
    design = deals()
    rows, _, _ = parts(design)
    rare = np.zeros(len(rows.selected))
    # Four rows decide about this dummy: a replication without both kinds of them is separated.
    rare[[*np.flatnonzero(rows.selected)[:2], *np.flatnonzero(~rows.selected)[:2]]] = 1.0
    wide = replace(
        rows, W=np.column_stack([rows.W, rare]), names=(*rows.names, "rare"), clusters={}
    )
    found = resampled(replace(design, selection=wide), 200)
    assert 0 < found.failed < 100
    assert len(found.second) == 200 - found.failed
    assert found.clusters == ""
    # Without both kinds: at least (1/e)^2-ish of the draws lack one kind altogether.
    assert found.failed / 200 == pytest.approx(2 * np.exp(-2) - np.exp(-4), abs=0.1)


def test_mostly_failing_replications_are_no_error(monkeypatch: pytest.MonkeyPatch) -> None:
    design = deals()

    def none(*_: object) -> tuple[np.ndarray, np.ndarray]:
        return np.full((10, 5), np.nan), np.full((10, 6), np.nan)

    monkeypatch.setattr(boot, "_block", none)
    with pytest.raises(EstimationFailed, match="only 0 of 10 replications"):
        resampled(design, 10)


def test_the_dimension_with_fewer_clusters_is_drawn() -> None:
    design = deals()
    rows, _, _ = parts(design)
    month = np.arange(len(rows.selected)) % 24
    both = replace(rows, clusters={**rows.clusters, "month": month})
    assert resampled(replace(design, selection=both), 20).clusters == "month"


@pytest.mark.parametrize("distance", [0.01, 0.1, 0.4])
def test_mills_series(distance: float) -> None:
    index = np.linspace(-8, 8, 161)
    series = batched.mills_series(index)
    powers = distance ** np.arange(len(series))
    np.testing.assert_allclose(powers @ series, mills(index + distance), rtol=1e-5, atol=1e-7)
    # Nine terms: the remainder is of the order of (d / 2.5)⁹.
    error = np.abs(powers @ series - mills(index + distance)).max()
    assert error < 10 * (distance / 2.5) ** 9 + 1e-14


def test_mills_ratio_is_density_over_distribution() -> None:
    index = np.linspace(-6, 6, 49)
    np.testing.assert_allclose(
        mills(index), stats.norm.pdf(index) / special.ndtr(index), rtol=1e-13
    )


def test_a_label_that_is_swapped_is_refused() -> None:
    design = deals()
    rows, _, _ = parts(design)
    swapped = replace(rows, selected=~rows.selected)
    with pytest.raises(InputProblem) as caught:
        heckman_two_step(replace(design, selection=swapped), FitOptions())
    assert caught.value.findings[0].rule == "selection_rows"
