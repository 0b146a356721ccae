"""Adjusted p-values and the specification grid against full fits."""

from __future__ import annotations

from dataclasses import replace
from itertools import product

import numpy as np
import pytest

from pipeline.core.design import Design, FitOptions
from pipeline.core.findings import InputProblem
from pipeline.core.rules import RULES
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.least_squares import fixed_effects, ols
from pipeline.scrutiny import curve, grid, multiplicity
from pipeline.scrutiny.influence import rows_of
from tests.estimators.designs import deals, one_cluster_dimension, without

CLUSTERED = FitOptions(cluster=True)


@pytest.fixture(scope="module")
def design() -> Design:
    return one_cluster_dimension(without(deals(candidates=400), "selection"))


def choices(design: Design, **more: object) -> grid.Choices:
    rng = np.random.default_rng(3)
    holes = design.y + 0.01 * rng.normal(size=design.n)
    holes[rng.random(design.n) < 0.1] = np.nan
    every = design.names[2:]
    parts: dict[str, object] = {
        "outcomes": {"[-1, +1]": design.y, "[-2, +2]": holes},
        "controls": {"all": every, "none": (), "size only": ("relative_size",)},
        "winsorise": {"as it is": 0.0, "2% a side": 0.02},
        "samples": {"all": np.ones(design.n, dtype=bool), "late": design.effects["year"] > 1},
        "estimators": {"least squares": "ols", "within": "fixed_effects"},
    }
    return grid.Choices(**{**parts, **more})  # type: ignore[arg-type]


def test_every_cell_equals_a_full_fit(design: Design) -> None:
    declared = choices(design)
    found = grid.specification_grid(design, declared, CLUSTERED)
    assert len(found.cells) == 2 * 3 * 2 * 2 * 2
    assert len({replace(c, estimate=0, std_error=0, p_value=0, n=0) for c in found.cells}) == 48
    fits = {"least squares": ols, "within": fixed_effects}
    for cell in found.cells:
        y = declared.outcomes[cell.outcome]
        keep = declared.samples[cell.sample] & np.isfinite(y)
        tail = declared.winsorise[cell.winsorise]
        low, high = np.quantile(y[keep], [tail, 1 - tail])
        names = ("constant", design.treatment, *declared.controls[cell.controls])
        slim = replace(
            design,
            y=np.where(keep, np.clip(y, low, high), 0.0),
            X=design.X[:, [design.names.index(name) for name in names]],
            names=names,
        )
        column = fits[cell.estimator](rows_of(slim, keep), CLUSTERED)
        term = column.term(design.treatment)
        assert cell.estimate == pytest.approx(term["coefficient"], abs=1e-10)
        assert cell.std_error == pytest.approx(term["std_error"], rel=1e-8)
        assert cell.p_value == pytest.approx(term["p_value"], rel=1e-6)
        assert cell.n == column.n


def test_other_estimators_are_fitted_cell_by_cell(design: Design) -> None:
    found = grid.specification_grid(
        design,
        choices(
            design,
            controls={"all": design.names[2:]},
            estimators={"two stages": "iv"},
            fits={"iv": two_stage_least_squares},
        ),
        FitOptions(),
    )
    assert len(found.cells) == 8
    assert found.blocks == ()
    term = two_stage_least_squares(design, FitOptions()).term(design.treatment)
    assert found.cells[0].estimate == term["coefficient"]
    assert found.influence[:, 0].any()


def test_a_cell_without_an_answer_says_why(design: Design) -> None:
    treated = design.X[:, 1] == 1
    found = grid.specification_grid(
        design,
        choices(design, samples={"all": np.ones(design.n, dtype=bool), "treated": treated}),
        CLUSTERED,
    )
    failed = [cell for cell in found.cells if cell.sample == "treated"]
    assert failed
    assert all(np.isnan(cell.estimate) and cell.reason for cell in failed)
    assert curve.summary(found).failed == len(failed)


def test_too_many_cells_are_refused_unless_allowed(design: Design) -> None:
    many = {f"window {at}": design.y for at in range(400)}
    with pytest.raises(InputProblem) as caught:
        grid.specification_grid(design, choices(design, outcomes=many), CLUSTERED)
    assert caught.value.findings[0].rule == "grid_too_large"
    allowed = choices(design, outcomes=many, allow=True, controls={"none": ()})
    assert len(grid.specification_grid(design, allowed, CLUSTERED).cells) == 3200


@pytest.mark.parametrize(
    ("more", "rule"),
    [
        ({"controls": {"all": ("unheard_of",)}}, "grid_control"),
        ({"winsorise": {"too much": 0.4}}, "winsorise_range"),
    ],
)
def test_impossible_choices(design: Design, more: dict[str, object], rule: str) -> None:
    with pytest.raises(InputProblem) as caught:
        grid.specification_grid(design, choices(design, **more), CLUSTERED)
    assert caught.value.findings[0].rule == rule
    assert rule in RULES


def test_the_curve_in_numbers(design: Design) -> None:
    found = grid.specification_grid(design, choices(design), CLUSTERED)
    told = curve.summary(found)
    values = np.array([cell.estimate for cell in found.cells])
    assert told.cells == len(values)
    assert told.median == np.median(values)
    assert (told.low, told.high) == (values.min(), values.max())
    assert told.same_sign == np.mean(np.sign(values) == np.sign(values[0]))


def test_permutations_see_an_effect_and_repeat(design: Design) -> None:
    loud = replace(design, y=design.y + 0.2 * design.X[:, 1])
    found = grid.specification_grid(loud, choices(loud), CLUSTERED)
    told = curve.with_permutations(found, curve.summary(found), 99, 4)
    assert told.p_median == told.p_significant == 0.01
    assert curve.with_permutations(found, curve.summary(found), 99, 4) == told


def test_permuted_coefficients_are_those_of_refits(design: Design) -> None:
    """A treatment dealt out anew and refitted: the block's shortcut gives the same t, HC1."""
    found = grid.specification_grid(
        without(design, "clusters"), choices(design), FitOptions(covariance="hc1")
    )
    rng = np.random.default_rng(5)
    for block in found.blocks:
        D = rng.permutation(block.D)
        b, t = curve._cells(block.controls, block.Y, D[:, None], block.effects)
        base = rows_of(without(design, "clusters"), block.kept)
        first = found.cells[block.cells[0]]
        declared = choices(design)
        names = ("constant", design.treatment, *declared.controls[first.controls])
        X = base.X[:, [design.names.index(name) for name in names]].copy()
        X[:, 1] = D
        y = declared.outcomes[first.outcome][block.kept]
        refit = {"least squares": ols, "within": fixed_effects}[first.estimator](
            replace(base, X=X, names=names, y=y), FitOptions(covariance="hc1")
        ).term(design.treatment)
        assert b[0, 0] == pytest.approx(refit["coefficient"], abs=1e-10)
        if first.estimator == "least squares":
            assert t[0, 0] == pytest.approx(refit["statistic"], rel=1e-8)


def test_adjusted_cells_are_ordered(design: Design) -> None:
    found = grid.specification_grid(design, choices(design), CLUSTERED)
    usable, told = curve.adjusted_cells(found, 499, 1)
    assert len(usable) == len(found.cells)
    assert (told.holm >= told.raw).all()
    assert (told.benjamini_hochberg <= told.holm + 1e-12).all()
    order = np.argsort(told.raw)
    assert (np.diff(told.holm[order]) >= 0).all()
    assert told.romano_wolf.min() >= 1 / 500


def test_the_same_signs_serve_all_cells() -> None:
    rng = np.random.default_rng(2)
    psi = rng.normal(size=(60, 1)) @ np.ones((1, 3))
    draws = multiplicity.score_draws(psi, np.arange(60) // 3, 50, 3)
    assert draws[:, 0] == pytest.approx(draws[:, 1], abs=1e-12)
    assert np.array_equal(draws, multiplicity.score_draws(psi, np.arange(60) // 3, 50, 3))


def test_all_combinations_are_there(design: Design) -> None:
    declared = choices(design)
    found = grid.specification_grid(design, declared, CLUSTERED)
    seen = {(c.outcome, c.controls, c.winsorise, c.sample, c.estimator) for c in found.cells}
    assert seen == set(
        product(
            declared.outcomes,
            declared.controls,
            declared.winsorise,
            declared.samples,
            declared.estimators,
        )
    )
    assert found.cells[0].outcome == "[-1, +1]"
