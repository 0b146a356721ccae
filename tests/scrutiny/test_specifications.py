"""The specification curve of a study: cells against refits, and the curve in numbers."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from pipeline.core.design import FitOptions
from pipeline.estimators.least_squares import fixed_effects, ols
from pipeline.scrutiny.specifications import specifications
from tests.estimators.designs import deals


def test_cells_are_the_fits_they_name() -> None:
    """Each cell equals the estimator run on its outcome, controls and deals."""
    design = deals()
    other = design.y + np.random.default_rng(5).normal(0, 0.01, design.n)
    keep = np.arange(design.n) % 7 != 0
    cells, numbers = specifications(
        design,
        {"[-1, +1], market model": design.y, "[-2, +2], market model": other},
        {"all deals": np.ones(design.n, dtype=bool), "without some": keep},
        [["relative_size"]],
        [0.0],
        0,
        1,
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
        [],
        [0.0, 0.01],
        49,
        3,
        FitOptions(),
    )
    one, other = (specifications(*how)[1] for _ in range(2))
    assert one.equals(other)
    p = one.set_index("name").loc["p_median", "value"]
    assert 1 / 50 <= p <= 1
