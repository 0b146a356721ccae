"""Covariances against hand counts and the identities that tie them together."""

from __future__ import annotations

import numpy as np
import pytest

from pipeline.core.design import FitOptions
from pipeline.core.estimate import EstimationFailed
from pipeline.core.findings import InputProblem
from pipeline.estimators import covariance as cov
from pipeline.estimators import errors
from pipeline.estimators.algebra import leverage, solve


@pytest.fixture
def sample() -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    rng = np.random.default_rng(2)
    X = np.column_stack([np.ones(40), rng.normal(size=(40, 2))])
    y = X @ [1.0, 2.0, -1.0] + rng.normal(size=40) * (1 + np.abs(X[:, 1]))
    _, e, bread = solve(X, y)
    return X, e, bread, (X @ bread) * e[:, None]


def test_mean_of_four_by_hand() -> None:
    # y = 1, 2, 3, 6: mean 3, residuals -2, -1, 0, 3, Σe² = 14; psi = e/4, h = 1/4.
    e = np.array([-2.0, -1.0, 0.0, 3.0])
    influence, h = (e / 4)[:, None], np.full(4, 0.25)
    assert cov.hc0(influence)[0, 0] == pytest.approx(14 / 16)
    assert cov.hc1(influence, 1)[0, 0] == pytest.approx(14 / 12)
    assert cov.hc2(influence, h)[0, 0] == pytest.approx(14 / 12)
    assert cov.hc3(influence, h)[0, 0] == pytest.approx(14 / 9)
    # Clusters {1, 2} and {3, 4}: sums -3 and 3 of e; factor 2/1 · 3/3.
    clustered = cov.cluster_covariance(influence, np.array([0, 0, 1, 1]), 1)
    assert clustered[0, 0] == pytest.approx(2 * (9 + 9) / 16)


def test_clusters_of_one_row_are_hc1(sample: tuple[np.ndarray, ...]) -> None:
    *_, influence = sample
    alone = cov.cluster_covariance(influence, np.arange(40), 3)
    np.testing.assert_allclose(alone, cov.hc1(influence, 3), rtol=1e-12)


def test_hc2_is_unbiased_under_equal_variances(sample: tuple[np.ndarray, ...]) -> None:
    # E[e_i²] = σ²(1 - h_i), so the expected HC2 is σ²(X'X)⁻¹ exactly (MacKinnon and White 1985).
    X, _, bread, _ = sample
    h = leverage(X, bread)
    expected = (X @ bread) * np.sqrt(1 - h)[:, None]
    np.testing.assert_allclose(cov.hc2(expected, h), bread, rtol=1e-12)


def test_hc3_brackets_the_jackknife(sample: tuple[np.ndarray, ...]) -> None:
    # HC3 is the jackknife less its correction for the mean (MacKinnon and White 1985, sec. 3).
    X, e, bread, influence = sample
    y = X @ [1.0, 2.0, -1.0] + e
    full = solve(X, y)[0]
    moved = np.array([solve(np.delete(X, i, 0), np.delete(y, i))[0] - full for i in range(40)])
    hc3 = cov.hc3(influence, leverage(X, bread))
    np.testing.assert_allclose(moved.T @ moved, hc3, rtol=1e-10)


def test_two_way_of_one_dimension_is_one_way(sample: tuple[np.ndarray, ...]) -> None:
    *_, influence = sample
    codes = np.arange(40) % 7
    both = cov.two_way_covariance(influence, codes, codes, 3)
    np.testing.assert_allclose(
        both.covariance, cov.cluster_covariance(influence, codes, 3), rtol=1e-10
    )
    assert not both.floored


def test_nested_dimension_leaves_the_coarse_one(sample: tuple[np.ndarray, ...]) -> None:
    *_, influence = sample
    fine = np.arange(40) // 2
    both = cov.two_way_covariance(influence, fine, fine // 4, 3)
    np.testing.assert_allclose(
        both.covariance, cov.cluster_covariance(influence, fine // 4, 3), rtol=1e-10
    )


def test_negative_eigenvalues_are_zeroed_and_said() -> None:
    rng = np.random.default_rng(0)
    floored = 0
    for _ in range(200):
        influence = rng.normal(size=(12, 3))
        influence -= influence.mean(axis=0)
        a, b = rng.integers(0, 3, size=(2, 12))
        both = cov.two_way_covariance(influence, a, b, 3)
        scale = np.sqrt(np.maximum(np.diag(both.covariance), 1e-300))
        assert np.linalg.eigvalsh(both.covariance / np.outer(scale, scale))[0] > -1e-8
        raw = sum(
            s * cov.cluster_covariance(influence, c, 3)
            for s, c in ((1, a), (1, b), (-1, cov.intersection(a, b)))
        )
        # 1e-9 of the largest: far above rounding, far below what a real shortfall looks like.
        negative = np.linalg.eigvalsh(raw)[0] < -1e-9 * np.abs(raw).max()
        assert both.floored >= negative
        floored += both.floored
    assert floored > 10


def test_rule_words_and_degrees_of_freedom() -> None:
    codes = {"acquirer": np.arange(60) % 30, "month": np.arange(60) % 12}
    rule = errors.choose_errors(codes, 60, FitOptions(cluster=True), otherwise="hc3")
    df, sentence = errors.degrees_of_freedom(rule, 4)
    assert df == 11
    assert "12 by month" in sentence
    assert "two-way clustered by acquirer and month" in errors.words(rule)
    notes = " ".join(errors.cautions(rule, True))
    assert "30 clusters by acquirer" in notes
    assert "12 clusters by month" in notes
    assert "negative eigenvalues" in notes
    few = errors.ErrorRule("cluster", {"acquirer": np.arange(60) % 4}, 60)
    assert "Only 4 clusters" in errors.cautions(few, False)[0]


def test_covariances_a_study_cannot_have() -> None:
    three = {name: np.arange(9) % 3 for name in "abc"}
    cases = [
        ({}, FitOptions(cluster=True), "no_clusters"),
        (three, FitOptions(cluster=True), "cluster_dimensions"),
        ({"a": np.array([0, 1, -1])}, FitOptions(cluster=True), "cluster_missing"),
        ({"a": np.zeros(3, dtype=int)}, FitOptions(cluster=True), "one_cluster"),
        ({}, FitOptions(covariance="hc3"), "covariance_option"),
    ]
    for clusters, options, rule in cases:
        with pytest.raises(InputProblem) as caught:
            errors.choose_errors(clusters, 3, options, otherwise="hc1", supported=("hc1",))
        assert caught.value.findings[0].rule == rule


@pytest.mark.parametrize(
    "wrong",
    [{"level": 1.0}, {"level": 0.4}, {"covariance": "HC3"}, {"covariance": "hc1", "cluster": True}],
)
def test_options_out_of_range(wrong: dict[str, object]) -> None:
    with pytest.raises(ValueError, match=r"level|covariance"):
        FitOptions(**wrong)  # type: ignore[arg-type]


def test_variance_that_is_not_positive_is_withheld() -> None:
    with pytest.raises(EstimationFailed, match="run_up"):
        errors.positive(np.diag([1.0, 0.0]), ("size", "run_up"))


def test_hc2_without_leverages_is_a_mistake_of_the_caller() -> None:
    rule = errors.ErrorRule("hc2", {}, 3)
    with pytest.raises(ValueError, match="leverages"):
        errors.of_influence(rule, np.ones((3, 1)), 1)
