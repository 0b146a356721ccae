"""The specification curve of a study: cells against refits, and the curve in numbers."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from pipeline.core.design import FitOptions
from pipeline.core.findings import InputProblem
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.k_class import fuller
from pipeline.estimators.least_squares import fixed_effects, ols
from pipeline.scrutiny.specifications import Wanted, specifications
from tests.estimators.designs import deals, one_cluster_dimension, without


def test_cells_are_the_fits_they_name() -> None:
    """Each cell equals the estimator run on its outcome, controls and deals."""
    design = deals()
    other = design.y + np.random.default_rng(5).normal(0, 0.01, design.n)
    keep = np.arange(design.n) % 7 != 0
    cells, numbers = specifications(
        design,
        {"[-1, +1], market model": design.y, "[-2, +2], market model": other},
        {"all deals": np.ones(design.n, dtype=bool), "without some": keep},
        Wanted(control_sets=[["relative_size"]]),
        FitOptions(),
    )
    assert len(cells) == 2 * 3 * 2 * 2
    first = cells.iloc[0]
    known = fixed_effects(design, FitOptions()).term(design.treatment)
    assert first["estimate"] == pytest.approx(known["coefficient"], rel=1e-8)
    assert first["p_value"] == pytest.approx(known["p_value"], rel=1e-6)
    chosen = cells[
        (cells["outcome"] == "[-2, +2], market model")
        & (cells["controls"] == "relative_size")
        & (cells["sample"] == "all deals")
        & (cells["estimator"] == "least squares")
    ].iloc[0]
    at = [design.names.index(name) for name in ("constant", design.treatment, "relative_size")]
    slim = replace(
        design,
        y=other,
        X=design.X[:, at],
        names=("constant", design.treatment, "relative_size"),
        effects={},
    )
    known = ols(slim, FitOptions(cluster=True)).term(design.treatment)
    assert chosen["estimate"] == pytest.approx(known["coefficient"], rel=1e-8)
    assert chosen["std_error"] == pytest.approx(known["std_error"], rel=1e-6)
    found = numbers.set_index("name")["value"]
    assert found["cells"] == len(cells)
    assert found["median"] == np.median(cells["estimate"])
    assert found["low"] == cells["estimate"].min()
    assert np.isnan(found["p_median"])


def test_permutations_are_the_same_every_time() -> None:
    design = deals()
    how = (
        design,
        {"y": design.y},
        {"all deals": np.ones(design.n, dtype=bool)},
        Wanted(winsorise=[0.0, 0.01], permutations=49, adjusted_by=99, seed=3),
        FitOptions(),
    )
    one, other = (specifications(*how)[1] for _ in range(2))
    assert one.equals(other)
    p = one.set_index("name").loc["p_median", "value"]
    assert 1 / 50 <= p <= 1


def test_all_cells_are_allowed_for_at_once() -> None:
    design = deals()
    cells, numbers = specifications(
        design,
        {"y": design.y, "more": design.y + np.random.default_rng(2).normal(0, 0.02, design.n)},
        {},
        Wanted(winsorise=[0.0, 0.05], adjusted_by=299, seed=3),
        FitOptions(),
    )
    assert (cells["p_step_down"] >= 1 / 300).all()
    assert (cells["p_holm"] >= cells["p_value"]).all()
    assert (cells["q_false_discovery"] <= cells["p_holm"] + 1e-12).all()
    share = numbers.set_index("name").loc["significant_adjusted", "value"]
    assert share == (cells["p_step_down"] < 0.05).mean()


def test_named_estimators_are_cells_with_their_own_fit() -> None:
    """Two stages as a matrix product, another estimator fitted; clusters, effects, controls."""
    design = one_cluster_dimension(without(deals(candidates=300), "selection"))
    told: list[tuple[int, int]] = []
    cells, _ = specifications(
        design,
        {"y": design.y},
        {},
        Wanted(
            winsorise=[0.0, 0.02],
            estimators=["two_stage_least_squares", "fuller"],
            fits={"fuller": fuller},
            adjusted_by=99,
        ),
        FitOptions(),
        lambda done, total: told.append((done, total)),
    )
    first = two_stage_least_squares(design, FitOptions()).term(design.treatment)
    assert cells["estimate"].iloc[0] == pytest.approx(first["coefficient"], rel=1e-10)
    assert cells["std_error"].iloc[0] == pytest.approx(first["std_error"], rel=1e-9)
    assert cells["p_value"].iloc[0] == pytest.approx(first["p_value"], rel=1e-6)
    own = cells[(cells["estimator"] == "fuller") & (cells["controls"] == "all controls")].iloc[0]
    known = fuller(design, FitOptions()).term(design.treatment)
    assert own["estimate"] == pytest.approx(known["coefficient"], rel=1e-10)
    assert (cells["estimator"] == "two-stage least squares").sum() == 4
    assert told[-1] == (len(cells), len(cells))
    assert [done for done, _ in told] == sorted(done for done, _ in told)


def test_a_grid_beyond_its_limit_names_key_and_remedy() -> None:
    design = deals()
    with pytest.raises(InputProblem) as caught:
        specifications(design, {"y": design.y}, {}, Wanted(most_cells=3), FitOptions())
    (finding,) = caught.value.findings
    assert finding.rule == "grid_too_large"
    assert "most_cells" in finding.expected
    assert "scrutiny.grid.allow" in finding.remedy
    cells, _ = specifications(
        design, {"y": design.y}, {}, Wanted(most_cells=3, allow=True), FitOptions()
    )
    assert len(cells) == 4
