"""The Anderson-Rubin test with clusters: CR3 and Hotelling's degrees of freedom, on the rows."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import linalg, stats

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import NotApplicable, Shape, TestResult
from pipeline.core.findings import InputProblem
from pipeline.estimators import clustered_forms, few_clusters
from pipeline.estimators.anderson_rubin import ReducedForms, anderson_rubin_set, anderson_rubin_test
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.projection import projected_set
from pipeline.estimators.stages import parts_of, reduced_forms
from tests.estimators.designs import deals, with_instruments
from tests.estimators.several import two_chosen
from tests.estimators.test_least_squares import dummies


def one_chosen(L: int = 4, groups: int = 24) -> Design:
    return with_instruments(replace(two_chosen(groups=groups), also_endogenous=()), *range(L))


def brute(design: Design, value: float) -> tuple[float, float]:
    """T² and η with n×n matrices, every indicator a column, generalised inverses where needed."""
    wide, codes = dummies(design), design.clusters["acquirer"]
    at, L = wide.names.index("paid_in_shares"), design.Z.shape[1]
    C = np.delete(wide.X, at, axis=1)
    C = linalg.orth(C / np.linalg.norm(C, axis=0))
    W = np.column_stack([design.Z, C])
    bread = np.linalg.inv(W.T @ W)
    M = np.eye(design.n) - W @ bread @ W.T
    y = design.y - value * wide.X[:, at]
    pi, e = (bread @ W.T @ y)[:L], M @ y
    P, scores = [], []
    groups = np.unique(codes)
    for g in groups:
        rows = codes == g
        values, vectors = np.linalg.eigh(M[np.ix_(rows, rows)])
        inverse = vectors * np.where(values > 1e-9, 1 / np.maximum(values, 1e-9), 0) @ vectors.T
        loads = inverse @ W[rows] @ bread[:, :L]
        scores.append(loads.T @ e[rows])
        P.append(M[:, rows] @ loads)
    G = len(groups)
    V = np.array(scores).T @ np.array(scores) * (G - 1) / G
    root = linalg.inv(linalg.sqrtm(sum(p.T @ p for p in P)).real)
    total = 0.0
    for p in P:
        for q in P:
            B = root @ p.T @ q @ root
            total += np.trace(B) ** 2 + np.trace(B @ B)
    return float(pi @ np.linalg.solve(V, pi)), L * (L + 1) / total


# Source of the degrees of freedom: Pustejovsky and Tipton (2018), eq. 15, written out.
@pytest.mark.parametrize("effects", [(), ("industry", "year"), ("acquirer", "year")])
@pytest.mark.parametrize("L", [1, 3])
def test_the_test_is_its_definition(effects: tuple[str, ...], L: int) -> None:
    design = one_chosen(L)
    known = {**design.effects, **design.clusters}
    design = replace(design, effects={name: known[name] for name in effects})
    forms = clustered_forms.inverted_forms(parts_of(design, FitOptions()))
    for value in (0.0, -0.04):
        T, eta = brute(design, value)
        test = anderson_rubin_test(forms, value)
        assert isinstance(test, TestResult)
        assert forms.hotelling == pytest.approx(eta, rel=1e-7)
        assert test.statistic == pytest.approx(T * (eta - L + 1) / (L * eta), rel=1e-7)
        assert test.df == pytest.approx((L, eta - L + 1), rel=1e-7)
        assert test.p_value == pytest.approx(stats.f.sf(test.statistic, *test.df), rel=1e-9)


def test_one_direction_has_satterthwaite_s_degrees_of_freedom() -> None:
    rng = np.random.default_rng(1)
    squares, cross = rng.uniform(1, 2, size=(9, 1, 1)), 0.2 * rng.normal(size=(9, 3, 1))
    found = clustered_forms.degrees_of_freedom(squares, cross)
    theirs = few_clusters._satterthwaite(squares[:, 0, 0], cross[:, :, 0])
    assert found == pytest.approx(theirs, rel=1e-10)


def test_many_even_clusters_change_little() -> None:
    design = replace(deals(candidates=2400), effects={})
    design = replace(design, clusters={"deal": np.arange(design.n)})
    parts = parts_of(design, FitOptions())
    one, other = clustered_forms.inverted_forms(parts), reduced_forms(parts)
    first, second = anderson_rubin_set(one, 0.95), anderson_rubin_set(other, 0.95)
    assert (first.low, first.high) == pytest.approx((second.low, second.high), rel=0.03)


def test_without_clusters_it_is_the_reduced_form() -> None:
    for kind in ("classical", "hc1"):
        parts = parts_of(one_chosen(), FitOptions(covariance=kind))
        one, other = clustered_forms.inverted_forms(parts), reduced_forms(parts)
        np.testing.assert_array_equal(one.covariance, other.covariance)
        assert one.hotelling == 0


def test_joint_test_of_two_variables_is_the_reduced_form_s() -> None:
    """At zero the endogenous variables do not matter, one or two of them."""
    both = two_chosen()
    one = replace(
        both,
        X=np.delete(both.X, 2, axis=1),
        names=tuple(name for name in both.names if name != "relative_size"),
        also_endogenous=(),
    )
    found = []
    for design in (both, one):
        test = two_stage_least_squares(design, FitOptions()).tests["anderson_rubin"]
        assert isinstance(test, TestResult)
        found.append(test)
    assert found[0].statistic == pytest.approx(found[1].statistic, rel=1e-9)
    assert "all endogenous" in found[0].null


@pytest.mark.parametrize("L", [1, 2])
def test_two_dimensions_use_the_smaller_degrees_of_freedom(L: int) -> None:
    design = with_instruments(deals(), *range(L))
    both = clustered_forms.inverted_forms(parts_of(design, FitOptions(cluster=True)))
    alone = [
        clustered_forms.inverted_forms(
            parts_of(replace(design, clusters={name: codes}), FitOptions(cluster=True))
        )
        for name, codes in design.clusters.items()
    ]
    assert both.hotelling == min(one.hotelling for one in alone)
    total = alone[0].covariance + alone[1].covariance
    if L > 1:
        np.testing.assert_allclose(both.covariance, total, rtol=1e-8, atol=1e-18)
    else:
        assert (np.diag(both.covariance) < np.diag(total)).all()


def test_too_few_clusters_for_the_instruments_reject_nothing() -> None:
    rng = np.random.default_rng(2)
    root = rng.normal(size=(10, 12))
    forms = ReducedForms(rng.normal(size=5), rng.normal(size=5), root @ root.T, 7.0, hotelling=4.5)
    assert isinstance(anderson_rubin_test(forms), NotApplicable)
    assert anderson_rubin_set(forms, 0.95).shape is Shape.LINE
    more = replace(forms, others=rng.normal(size=(5, 1)), covariance=np.eye(15))
    assert projected_set(more, 0.95).shape is Shape.LINE
    assert "too few" in projected_set(more, 0.95).method


def test_an_instrument_that_varies_in_one_cluster_is_refused() -> None:
    design = replace(one_chosen(1), effects=one_chosen().clusters)
    lone = np.where(design.clusters["acquirer"] == 3, design.Z[:, 0], 0.0)
    with pytest.raises(InputProblem) as caught:
        two_stage_least_squares(replace(design, Z=lone[:, None]), FitOptions())
    assert caught.value.findings[0].rule == "cluster_decides"
    pair = replace(
        design, Z=np.column_stack([design.Z[:, 0], lone]), instruments=("reason 0", "lone")
    )
    with pytest.raises(InputProblem) as caught:
        two_stage_least_squares(pair, FitOptions())
    assert caught.value.findings[0].rule == "cluster_decides"


def test_units_and_combinations_of_the_instruments_do_not_matter() -> None:
    design = one_chosen()
    mix = np.array([[1.0, 2, 0, 0], [0, 1e3, 1, 0], [0, 0, 1, -1], [1, 0, 0, 1e-2]])
    one = two_stage_least_squares(design, FitOptions())
    other = two_stage_least_squares(replace(design, Z=design.Z @ mix), FitOptions())
    for name, result in one.tests.items():
        again = other.tests[name]
        if isinstance(result, TestResult):
            assert isinstance(again, TestResult)
            assert again.statistic == pytest.approx(result.statistic, rel=1e-6), name
    first, second = one.sets["anderson_rubin"], other.sets["anderson_rubin"]
    assert (second.low, second.high) == pytest.approx((first.low, first.high), rel=1e-6)
