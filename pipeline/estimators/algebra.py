"""Least squares by orthogonal decomposition, and the refusal of dependent columns."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from scipy import linalg

from pipeline.core.findings import InputProblem, problem
from pipeline.core.prices import Floats

WHERE = "regression"
RANK_TOLERANCE = 1e-10


def refusal(rule: str, column: str, got: str, expected: str, remedy: str) -> InputProblem:
    """An :class:`InputProblem` that names the regression's column or key."""
    return problem(rule, WHERE, got=got, expected=expected, remedy=remedy, column=column)


def scaled(X: Floats) -> tuple[Floats, Floats]:
    """X (n, k) with columns of unit length, and the (k,) lengths; a zero column keeps length 1.

    Scaling makes rank and rounding independent of the units the regressors came in.
    """
    length = np.linalg.norm(X, axis=0)
    length = np.where(length > 0, length, 1.0)
    return np.asarray(X / length), np.asarray(length)


def solve(X: Floats, Y: Floats) -> tuple[Floats, Floats, Floats]:
    """Least squares of Y (n, m) or (n,) on X (n, k) of full column rank.

    Returns:
        coefficients (k, m) or (k,), residuals shaped as Y, and the bread (k, k), (X'X)⁻¹.
    """
    unit, length = scaled(X)
    Q, R = linalg.qr(unit, mode="economic")
    inverse = linalg.solve_triangular(R, np.eye(R.shape[0])) / length[:, None]
    coefficients = inverse @ (Q.T @ Y)
    return (
        np.asarray(coefficients, dtype=np.float64),
        np.asarray(Y - X @ coefficients, dtype=np.float64),
        np.asarray(inverse @ inverse.T, dtype=np.float64),
    )


def orthonormal(X: Floats) -> Floats:
    """(n, k) orthonormal columns that span X (n, k) of full column rank; X when k is 0."""
    if X.shape[1] == 0:
        return X
    return np.asarray(linalg.qr(scaled(X)[0], mode="economic")[0], dtype=np.float64)


def leverage(X: Floats, bread: Floats) -> Floats:
    """(n,) diagonal of X (X'X)⁻¹ X'."""
    return np.asarray(np.einsum("ij,jk,ik->i", X, bread, X), dtype=np.float64)


def partial_out(Y: Floats, X: Floats) -> Floats:
    """Residuals of Y (n, m) on X (n, k); Y itself when k is 0 (Frisch and Waugh 1933)."""
    if X.shape[1] == 0:
        return Y
    Q, _ = linalg.qr(scaled(X)[0], mode="economic")
    once = Y - Q @ (Q.T @ Y)
    return np.asarray(once - Q @ (Q.T @ once), dtype=np.float64)


def dependent(X: Floats, names: Sequence[str]) -> tuple[str, ...]:
    """The names that take part in a linear dependence among the columns of X (n, k).

    Pivoted QR of the unit-length columns gives the rank; each column left over is written in
    the basis found, and the basis columns it needs are named with it (Golub and Van Loan 2013,
    sec. 5.4). Empty when X has full column rank.
    """
    unit, _ = scaled(X)
    _, R, pivots = linalg.qr(unit, mode="economic", pivoting=True)
    size = np.abs(np.diag(R))
    rank = int((size > RANK_TOLERANCE * max(float(size[0]), 1e-300)).sum())
    if rank == len(names):
        return ()
    weights = linalg.solve_triangular(R[:rank, :rank], R[:rank, rank:])
    needed = (np.abs(weights) > 1e-6).any(axis=1)
    involved = set(pivots[rank:].tolist()) | set(pivots[:rank][needed].tolist())
    return tuple(name for at, name in enumerate(names) if at in involved)


def refuse_dependent(X: Floats, names: Sequence[str], rule: str = "collinear") -> None:
    """Raise unless X (n, k) has more rows than columns and full column rank.

    Raises:
        InputProblem: ``few_rows``, or ``rule`` naming the columns that depend on one another.
    """
    n, k = X.shape
    if n <= k:
        raise refusal(
            "few_rows",
            "",
            f"{n} rows for {k} coefficients",
            "more rows than coefficients",
            "use fewer regressors or a wider sample",
        )
    guilty = dependent(X, names)
    if guilty:
        listed = ", ".join(guilty)
        raise refusal(
            rule,
            listed,
            f"linearly dependent: {listed}",
            "regressors of which none is a combination of the others",
            "drop one of them",
        )


def symmetric_root(A: Floats) -> Floats:
    """Symmetric square root of a positive semi-definite matrix (k, k)."""
    values, vectors = np.linalg.eigh((A + A.T) / 2)
    return np.asarray(vectors * np.sqrt(np.maximum(values, 0.0)) @ vectors.T)
