"""The ladder of errors: each rung is the column it names."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from pipeline.core.design import Design, FitOptions
from pipeline.core.findings import InputProblem
from pipeline.estimators.ladder import Rung, ladder
from pipeline.estimators.least_squares import fixed_effects, ols
from tests.estimators.designs import deals, one_cluster_dimension, without
from tests.estimators.test_few_clusters import small

FEW_DRAWS = 999


def rungs(design: Design, level: float = 0.95) -> dict[str, Rung]:
    found = ladder(design, FitOptions(level=level), draws=FEW_DRAWS)
    return {rung.name: rung for rung in found}


@pytest.mark.parametrize("absorbed", [False, True])
def test_rungs_are_the_columns_they_name(absorbed: bool) -> None:
    design = deals()
    if not absorbed:
        design = without(design, "effects")
    fit = fixed_effects if absorbed else ols
    found = rungs(design, 0.9)
    one = one_cluster_dimension(design)
    columns = [
        fit(design, FitOptions(level=0.9, covariance="hc1")),
        fit(one, FitOptions(level=0.9, cluster=True)),
        fit(one, FitOptions(level=0.9, covariance="cr2")),
        fit(one, FitOptions(level=0.9, covariance="cr3")),
        fit(design, FitOptions(level=0.9, cluster=True)),
    ]
    for column in columns:
        rung, term = found[column.covariance_name], column.term("paid_in_shares")
        assert (rung.std_error, rung.p, rung.df) == (
            term["std_error"],
            term["p_value"],
            column.df,
        )
        assert (rung.low, rung.high) == (term["ci_low"], term["ci_high"])
    for name in design.clusters:
        rung = found[f"wild cluster bootstrap by {name}"]
        same = found[f"clustered by {name} (CR1)"]
        assert rung.std_error == pytest.approx(same.std_error, rel=1e-10)
        assert rung.low < columns[0].term("paid_in_shares")["coefficient"] < rung.high
        assert np.isnan(rung.df)


def test_few_clusters_get_six_points_too() -> None:
    found = rungs(without(small(1, groups=8), "effects"))
    assert "All 256 sign vectors." in found["wild cluster bootstrap by acquirer"].note
    assert "999 draws." in found["wild cluster bootstrap by acquirer, six-point weights"].note


def test_four_clusters_say_that_nothing_is_rejected() -> None:
    rung = rungs(without(small(2, groups=4), "effects"))["wild cluster bootstrap by acquirer"]
    assert (rung.low, rung.high) == (-np.inf, np.inf)
    assert "too few clusters" in rung.note


def test_a_rung_without_an_answer_says_why() -> None:
    found = rungs(deals())
    assert np.isnan(found["HC3"].std_error)
    assert "several effects" in found["HC3"].note
    design = without(small(3), "effects")
    X = design.X.copy()
    X[:, 1] = design.clusters["acquirer"] == 1
    lonely = rungs(replace(design, X=X))
    assert "one cluster by acquirer alone" in lonely["clustered by acquirer (CR3)"].note


def test_a_treatment_in_two_clusters_is_said_on_every_clustered_rung() -> None:
    design = without(small(4, groups=9), "effects")
    X = design.X.copy()
    X[:, 1] = design.clusters["acquirer"] < 2
    for name, rung in rungs(replace(design, X=X)).items():
        assert ("in 2 of the clusters by acquirer" in rung.note) is ("acquirer" in name)
    assert not any("holds its level" in rung.note for rung in rungs(design).values())


def test_one_cluster_leaves_its_rungs_empty() -> None:
    design = without(small(4), "effects")
    found = rungs(replace(design, clusters={"acquirer": np.zeros(design.n, dtype=int)}))
    empty = [rung for name, rung in found.items() if "acquirer" in name]
    assert len(empty) == 4
    assert all(np.isnan(rung.p) and "one cluster" in rung.note for rung in empty)


def test_no_coefficient_no_ladder() -> None:
    design = deals()
    with pytest.raises(InputProblem):
        ladder(replace(design, y=np.full(design.n, 0.1)), FitOptions())
