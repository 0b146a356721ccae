"""CR2 and CR3: exact identities, the textbook's matrices, and what is refused."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import linalg, stats

from pipeline.core.design import Design, FitOptions
from pipeline.core.findings import InputProblem
from pipeline.estimators import few_clusters as few
from pipeline.estimators.errors import ErrorRule
from pipeline.estimators.least_squares import fixed_effects, ols
from pipeline.estimators.sample import plain
from tests.estimators.designs import deals, one_cluster_dimension, shuffled, without

CR2, CR3 = FitOptions(covariance="cr2"), FitOptions(covariance="cr3")


def small(seed: int, groups: int = 7, n: int = 60) -> Design:
    """Uneven clusters; a regressor constant within them; ``batch`` nested, ``year`` across."""
    rng = np.random.default_rng(seed)
    code = np.concatenate([np.arange(groups), rng.choice(groups, n - groups, p=_shares(groups))])
    X = np.column_stack([np.ones(n), rng.normal(size=n), rng.normal(size=groups)[code]])
    X[:, 1] += 0.5 * rng.normal(size=groups)[code]
    y = X @ np.array([0.2, 0.3, -0.1]) + rng.normal(size=groups)[code] + rng.normal(size=n)
    return Design(
        y=y,
        X=X,
        names=("constant", "treatment", "control"),
        treatment="treatment",
        rows=tuple(map(str, range(n))),
        outcome="CAR",
        effects={"batch": 2 * code + rng.integers(0, 2, size=n), "year": rng.integers(0, 4, n)},
        clusters={"acquirer": code},
        Z=np.empty((n, 0)),
    )


def _shares(groups: int) -> np.ndarray:
    weight = 1.0 / np.arange(1, groups + 1)
    return np.asarray(weight / weight.sum())


def basis(design: Design) -> few.Basis:
    codes = design.clusters["acquirer"]
    rule = ErrorRule("cr2", {"acquirer": codes}, design.n)
    return few.basis_of(plain(design, rule), design, codes)


def brute(X: np.ndarray, e: np.ndarray, codes: np.ndarray, power: float) -> tuple[np.ndarray, ...]:
    """(V, df): the definition with n×n matrices, generalised inverses where needed."""
    bread = np.linalg.pinv(X.T @ X)
    H = X @ bread @ X.T
    M = np.eye(len(e)) - H
    V, P = np.zeros((X.shape[1],) * 2), []
    for g in np.unique(codes):
        rows = codes == g
        values, vectors = np.linalg.eigh(M[np.ix_(rows, rows)])
        root = np.where(values > 1e-9, np.abs(values) ** -power, 0.0)
        A = vectors * root @ vectors.T
        score = bread @ X[rows].T @ A @ e[rows]
        V += np.outer(score, score)
        P.append(M[:, rows] @ A @ X[rows] @ bread)
    df = []
    for j in range(X.shape[1]):
        columns = np.column_stack([p[:, j] for p in P])
        values = np.linalg.eigvalsh(columns.T @ columns)
        df.append(values.sum() ** 2 / (values**2).sum())
    return V, np.array(df)


@settings(max_examples=15, deadline=None)
@given(seed=st.integers(0, 10_000), groups=st.integers(4, 9))
def test_cr2_and_its_degrees_of_freedom_are_the_definition(seed: int, groups: int) -> None:
    design = small(seed, groups)
    column = ols(design, CR2)
    e = design.y - design.X @ column.coefficients
    V, df = brute(design.X, e, design.clusters["acquirer"], 0.5)
    np.testing.assert_allclose(column.covariance, V, rtol=1e-8, atol=1e-14)
    assert column.df == pytest.approx(df[1], rel=1e-8)
    assert [column.fit[f"df.{name}"] for name in column.names] == pytest.approx(df, rel=1e-8)
    assert 1 <= column.df <= groups - 1 + 1e-9


# Identity: E[V] = σ²(X'X)⁻¹ when errors are independent with one variance (Bell and McCaffrey
# 2002). V is a quadratic form in the errors, so its mean is a sum over unit vectors.
@pytest.mark.parametrize("seed", [1, 2])
def test_cr2_is_exactly_unbiased_under_independence(seed: int) -> None:
    design = small(seed)
    here = basis(design)
    bread = np.linalg.inv(design.X.T @ design.X)
    M = np.eye(design.n) - design.X @ bread @ design.X.T
    mean = sum(few.small_sample(here, column, "cr2").covariance for column in M)
    np.testing.assert_allclose(mean, bread, rtol=1e-10, atol=1e-14)


def jackknife(X: np.ndarray, y: np.ndarray, codes: np.ndarray, keep: slice) -> np.ndarray:
    full = linalg.lstsq(X, y)[0]
    groups = np.unique(codes)
    gaps = [linalg.lstsq(X[codes != g], y[codes != g])[0] - full for g in groups]
    moves = np.array(gaps)[:, keep]
    return np.asarray((len(groups) - 1) / len(groups) * moves.T @ moves)


# Identity: CR3 with (G - 1)/G is the jackknife over clusters (Bell and McCaffrey 2002).
@pytest.mark.parametrize("seed", range(3))
def test_cr3_is_the_jackknife(seed: int) -> None:
    design = small(seed)
    column = ols(design, CR3)
    wanted = jackknife(design.X, design.y, design.clusters["acquirer"], slice(None))
    np.testing.assert_allclose(column.covariance, wanted, rtol=1e-8)
    assert column.df == 6


def wide(design: Design) -> np.ndarray:
    dummies = [np.eye(int(c.max()) + 1)[c] for c in design.effects.values()]
    return np.column_stack([design.X[:, 1:], *dummies])


def dense(seed: int, *effects: str) -> Design:
    """No group of one row, so that nothing is set aside; acquirers' constants out of X."""
    design = small(seed, groups=6, n=120)
    codes = design.clusters["acquirer"]
    X = design.X.copy()
    X[:, 2] = np.random.default_rng(seed + 50).normal(size=design.n)
    chosen = {"acquirer": codes, **design.effects}
    return replace(design, X=X, effects={name: chosen[name] for name in effects})


@pytest.mark.parametrize(
    "effects", [("acquirer",), ("year",), ("acquirer", "year"), ("batch", "year")]
)
def test_absorbed_effects_are_dummies(effects: tuple[str, ...]) -> None:
    """Effects nested in the clusters, across them, and both; the referee lays every dummy out."""
    design = dense(4, *effects)
    X, codes = wide(design), design.clusters["acquirer"]
    e = design.y - X @ linalg.lstsq(X, design.y)[0]
    for options, power in ((CR2, 0.5), (CR3, 1.0)):
        column = fixed_effects(design, options)
        assert column.n == design.n
        V, df = brute(X, e, codes, power)
        factor = 1.0 if options is CR2 else 5 / 6
        np.testing.assert_allclose(column.covariance, V[:2, :2] * factor, rtol=1e-7)
        if options is CR2:
            assert column.df == pytest.approx(df[0], rel=1e-7)


def test_cr3_with_effects_is_the_jackknife_of_the_dummy_regression() -> None:
    design = dense(4, "acquirer", "year")
    wanted = jackknife(wide(design), design.y, design.clusters["acquirer"], slice(0, 2))
    np.testing.assert_allclose(fixed_effects(design, CR3).covariance, wanted, rtol=1e-7)


def test_clusters_of_one_row_are_hc2_and_hc3() -> None:
    design = without(deals(), "effects", "selection")
    own = replace(design, clusters={"deal": np.arange(design.n)})
    for few_kind, row_kind, factor in (("cr2", "hc2", 1.0), ("cr3", "hc3", 1 - 1 / design.n)):
        ours = ols(own, FitOptions(covariance=few_kind)).covariance
        rows = ols(own, FitOptions(covariance=row_kind)).covariance
        np.testing.assert_allclose(ours, factor * rows, rtol=1e-9, atol=1e-18)


@pytest.mark.parametrize("options", [CR2, CR3])
@pytest.mark.parametrize("fit", [ols, fixed_effects])
def test_names_rows_and_units_do_not_matter(fit: object, options: FitOptions) -> None:
    assert callable(fit)
    design = one_cluster_dimension(deals())
    X = design.X.copy()
    X[:, 2] *= 1e6
    renamed = {"acquirer": 7000 - 3 * design.clusters["acquirer"]}
    first = fit(design, options)
    for other in (
        shuffled(design),
        replace(design, clusters=renamed),
        replace(design, X=X),
    ):
        again = fit(other, options)
        at = first.names.index(first.treatment)
        assert again.std_errors[at] == pytest.approx(first.std_errors[at], rel=1e-8)
        assert again.df == pytest.approx(first.df, rel=1e-8)
    assert "clustered by acquirer (CR" in first.covariance_name
    assert first.std_errors[at] > fit(design, FitOptions(cluster=True)).std_errors[at]


def test_two_dimensions_are_refused() -> None:
    with pytest.raises(InputProblem) as caught:
        ols(deals(), CR2)
    assert caught.value.findings[0].rule == "cluster_dimensions"


def test_no_clusters_are_refused() -> None:
    with pytest.raises(InputProblem) as caught:
        ols(without(deals(), "clusters"), CR3)
    assert caught.value.findings[0].rule == "no_clusters"


@pytest.mark.parametrize("options", [CR2, CR3])
def test_a_treatment_in_one_cluster_is_refused(options: FitOptions) -> None:
    design = small(5)
    X = design.X.copy()
    X[:, 1] = design.clusters["acquirer"] == 2
    with pytest.raises(InputProblem) as caught:
        ols(replace(design, X=X), options)
    assert caught.value.findings[0].rule == "cluster_decides"
    assert caught.value.findings[0].column == "treatment"


def test_a_control_in_one_cluster_is_said() -> None:
    design = small(6)
    X = design.X.copy()
    X[:, 2] = (design.clusters["acquirer"] == 0) * np.arange(design.n)
    column = ols(replace(design, X=X), CR2)
    assert any("One cluster alone decides control" in note for note in column.notes)


def test_few_degrees_of_freedom_are_said() -> None:
    design = small(7, groups=4)
    column = ols(design, CR2)
    assert column.df < 4
    assert any("fewer than four" in note for note in column.notes)


def test_each_coefficient_has_its_own_degrees_of_freedom() -> None:
    """The t tables of every coefficient, from scipy, at Satterthwaite's df for it."""
    column = ols(small(5), CR2)
    df = np.array([column.fit[f"df.{name}"] for name in column.names])
    assert np.ptp(df) > 0.5
    np.testing.assert_array_equal(column.dfs, df)
    p = 2 * stats.t.sf(np.abs(column.statistics), df)
    np.testing.assert_allclose(column.p_values, p, rtol=1e-9)
    half = stats.t.ppf(0.975, df) * column.std_errors
    np.testing.assert_allclose(column.intervals[:, 1] - column.coefficients, half, rtol=1e-9)
    assert column.df == column.dfs[column.names.index("treatment")]
    again = fixed_effects(dense(4, "year"), CR2)
    assert again.df_each is not None
    assert ols(small(5), FitOptions(cluster=True)).df_each is None
