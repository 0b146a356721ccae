"""Least squares and rank, against numpy and by construction."""

from __future__ import annotations

import numpy as np
import pytest

from pipeline.core.findings import InputProblem
from pipeline.estimators import algebra


def test_least_squares_in_wild_units() -> None:
    rng = np.random.default_rng(1)
    X = np.column_stack([np.ones(80), rng.normal(size=(80, 3)) * [1e-8, 1.0, 1e9]])
    Y = rng.normal(size=(80, 2))
    b, e, bread = algebra.solve(X, Y)
    unit = X / np.linalg.norm(X, axis=0)
    expected = np.linalg.lstsq(unit, Y, rcond=None)[0] / np.linalg.norm(X, axis=0)[:, None]
    np.testing.assert_allclose(b, expected, rtol=1e-10)
    np.testing.assert_allclose(e, Y - X @ b, atol=1e-12)
    size = np.linalg.norm(X, axis=0)
    np.testing.assert_allclose(
        bread * np.outer(size, size), np.linalg.inv(unit.T @ unit), rtol=1e-10
    )


def test_leverages_sum_to_the_number_of_columns() -> None:
    X = np.random.default_rng(2).normal(size=(50, 4))
    bread = np.asarray(np.linalg.inv(X.T @ X), dtype=np.float64)
    assert algebra.leverage(X, bread).sum() == pytest.approx(4)


def test_partial_out_is_orthogonal_and_leaves_nothing_to_nothing() -> None:
    rng = np.random.default_rng(3)
    X, Y = rng.normal(size=(60, 3)), rng.normal(size=(60, 2))
    np.testing.assert_allclose(X.T @ algebra.partial_out(Y, X), 0, atol=1e-12)
    assert algebra.partial_out(Y, np.empty((60, 0))) is Y


def test_only_the_columns_of_the_dependence_are_named() -> None:
    rng = np.random.default_rng(4)
    a, b, c = rng.normal(size=(3, 30))
    X = np.column_stack([np.ones(30), a, b, c, 2 * a - 3])
    assert algebra.dependent(X, ("one", "a", "b", "c", "d")) == ("one", "a", "d")


def test_dummy_trap_is_a_dependence_with_the_constant() -> None:
    kind = np.arange(30) % 3
    X = np.column_stack([np.ones(30), *(kind == level for level in range(3))]).astype(float)
    assert algebra.dependent(X, ("one", "cash", "shares", "mixed")) == (
        "one",
        "cash",
        "shares",
        "mixed",
    )


def test_a_calendar_year_and_its_square_are_not_a_dependence() -> None:
    year = np.arange(2001.0, 2025.0)
    X = np.column_stack([np.ones(24), year, year**2])
    assert algebra.dependent(X, ("one", "year", "square")) == ()


def test_zero_column_and_too_few_rows() -> None:
    with pytest.raises(InputProblem) as caught:
        algebra.refuse_dependent(np.column_stack([np.ones(9), np.zeros(9)]), ("one", "nothing"))
    assert caught.value.findings[0].column == "nothing"
    with pytest.raises(InputProblem) as caught:
        algebra.refuse_dependent(np.eye(3), ("a", "b", "c"))
    assert caught.value.findings[0].rule == "few_rows"


def test_symmetric_root() -> None:
    A = np.cov(np.random.default_rng(5).normal(size=(3, 20)))
    root = algebra.symmetric_root(A)
    np.testing.assert_allclose(root @ root, A, atol=1e-12)
    np.testing.assert_allclose(root, root.T, atol=1e-12)
