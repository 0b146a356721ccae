"""Two endogenous variables, four instruments, two effects, uneven clusters: against linearmodels.

And the strength and rank of the instruments against the published formulas written out in numpy:
Sanderson and Windmeijer (2016, sec. 3), Kleibergen and Paap (2006, th. 1), Shea (1997).
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pandas as pd
import pytest
from linearmodels.iv import IV2SLS, IVGMM, IVLIML
from scipy import linalg

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import Estimate, TestResult
from pipeline.estimators.covariance import cluster_factor
from pipeline.estimators.gmm import two_step_gmm
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.k_class import fuller, limited_information
from tests.estimators.several import two_chosen
from tests.estimators.test_least_squares import dummies

KINDS = ("classical", "hc0", "hc1", "clustered")
CHOSEN = ["paid_in_shares", "relative_size"]


@pytest.fixture(scope="module")
def hard() -> Design:
    return two_chosen()


def options(kind: str) -> FitOptions:
    return FitOptions() if kind == "clustered" else FitOptions(covariance=kind)


def iv(design: Design) -> tuple[pd.Series, pd.DataFrame, pd.DataFrame, pd.DataFrame]:
    wide = dummies(design)
    table = pd.DataFrame(wide.X, columns=list(wide.names))
    z = pd.DataFrame(design.Z, columns=list(design.instruments))
    return pd.Series(design.y), table.drop(columns=CHOSEN), table[CHOSEN], z


def their_covariance(design: Design, kind: str) -> dict[str, Any]:
    if kind == "clustered":
        return {"cov_type": "clustered", "clusters": design.clusters["acquirer"], "debiased": False}
    return {
        "cov_type": "unadjusted" if kind == "classical" else "robust",
        "debiased": kind != "hc0",
    }


def agree(column: Estimate, fit: Any, kind: str, columns: int, rtol: float = 1e-7) -> None:
    """Clusters: theirs has no small-sample factor when not debiased, so ours is put in."""
    names = list(column.names)
    np.testing.assert_allclose(column.coefficients, fit.params[names], rtol=rtol, atol=1e-12)
    factor = 1.0
    if kind == "clustered":
        (groups,) = column.clusters.values()
        factor = cluster_factor(column.n, groups, columns)
    np.testing.assert_allclose(
        column.std_errors, fit.std_errors[names] * np.sqrt(factor), rtol=max(rtol, 1e-7)
    )


@pytest.mark.parametrize("kind", KINDS)
def test_two_stages_against_linearmodels(hard: Design, kind: str) -> None:
    y, exogenous, endogenous, z = iv(hard)
    fit = IV2SLS(y, exogenous, endogenous, z).fit(**their_covariance(hard, kind))
    column = two_stage_least_squares(hard, options(kind))
    agree(column, fit, kind, exogenous.shape[1] + 2)
    theirs = fit.first_stage.diagnostics
    for name, stage in zip(CHOSEN, column.stages[:2], strict=True):
        assert stage.outcome == name
        assert stage.fit["shea_r_squared"] == pytest.approx(theirs.loc[name, "shea.rsquared"])
        assert stage.fit["partial_r_squared"] == pytest.approx(theirs.loc[name, "partial.rsquared"])


def test_sargan_against_linearmodels(hard: Design) -> None:
    fit = IV2SLS(*iv(hard)).fit(cov_type="unadjusted")
    ours = two_stage_least_squares(hard, options("classical")).tests["overidentification"]
    assert isinstance(ours, TestResult)
    assert (ours.statistic, ours.p_value) == pytest.approx((fit.sargan.stat, fit.sargan.pval))
    assert ours.df == (2.0,)


@pytest.mark.parametrize("a", [0, 1])
def test_k_class_against_linearmodels(hard: Design, a: int) -> None:
    fit = IVLIML(*iv(hard), fuller=a).fit(cov_type="unadjusted", debiased=True)
    column = (fuller if a else limited_information)(hard, options("classical"))
    agree(column, fit, "classical", 0, rtol=1e-6)
    assert column.fit["kappa"] == pytest.approx(fit.kappa, rel=1e-10)


@pytest.mark.parametrize("kind", ["hc0", "clustered"])
def test_gmm_against_linearmodels(hard: Design, kind: str) -> None:
    y, exogenous, endogenous, z = iv(hard)
    extra = {"clusters": hard.clusters["acquirer"]} if kind == "clustered" else {}
    theirs = "clustered" if kind == "clustered" else "robust"
    # Twenty-four clusters cannot weigh the moments of every effect: the effects are left out.
    bare = replace(hard, effects={})
    y, exogenous, endogenous, z = iv(bare)
    scale = exogenous.abs().max()
    model = IVGMM(y, exogenous / scale, endogenous, z, weight_type=theirs, center=False, **extra)
    W = np.column_stack([exogenous / scale, z])
    fit: Any = model.fit(
        iter_limit=2,
        initial_weight=np.linalg.inv(W.T @ W / len(W)),
        cov_type=theirs,
        debiased=False,
        **extra,
    )
    column = two_step_gmm(bare, options(kind))
    names = list(column.names)
    unit = np.array([float(scale.get(name, 1.0)) for name in names])
    factor = 1.0
    if kind == "clustered":
        (groups,) = column.clusters.values()
        factor = cluster_factor(column.n, groups, exogenous.shape[1] + 2)
    np.testing.assert_allclose(column.coefficients, fit.params[names] / unit, rtol=1e-6)
    errors = fit.std_errors[names] / unit * np.sqrt(factor)
    np.testing.assert_allclose(column.std_errors, errors, rtol=1e-6)
    j = column.tests["overidentification"]
    assert isinstance(j, TestResult)
    assert (j.statistic, j.p_value) == pytest.approx((fit.j_stat.stat, fit.j_stat.pval), rel=1e-6)


def flattened(design: Design) -> tuple[np.ndarray, np.ndarray, int]:
    """Endogenous variables and instruments, every other regressor projected out; its columns."""
    _, exogenous, endogenous, z = iv(design)
    C = linalg.orth(exogenous.to_numpy() / np.linalg.norm(exogenous, axis=0))
    whole = np.column_stack([endogenous, z])
    left = whole - C @ (C.T @ whole)
    return left[:, :2], left[:, 2:], C.shape[1]


def meat(design: Design, rows: np.ndarray, kind: str, k: int) -> np.ndarray:
    """Σ of the rows' products with the fit's small-sample factor."""
    n = design.n
    if kind == "clustered":
        codes = design.clusters["acquirer"]
        sums = np.array([rows[codes == g].sum(axis=0) for g in np.unique(codes)])
        G = len(sums)
        return np.asarray(sums.T @ sums * G / (G - 1) * (n - 1) / (n - k))
    return np.asarray(rows.T @ rows * (n / (n - k) if kind == "hc1" else 1.0))


@pytest.mark.parametrize("kind", KINDS)
def test_conditional_f_is_the_published_formula(hard: Design, kind: str) -> None:
    """ũ = E_j - E₋ⱼδ̂ on Z; the robust form through a generalised inverse of rank L - p + 1."""
    E, Z, q = flattened(hard)
    n, L, p = hard.n, Z.shape[1], 2
    k = q + L
    P = Z @ np.linalg.inv(Z.T @ Z) @ Z.T
    column = two_stage_least_squares(hard, options(kind))
    for at in range(p):
        other = E[:, 1 - at]
        delta = float(other @ P @ E[:, at]) / float(other @ P @ other)
        u = E[:, at] - delta * other
        left = u - P @ u
        if kind == "classical":
            F = float(u @ P @ u) / (L - p + 1) / (float(left @ left) / (n - k))
        else:
            # Z'ũ = M Z'u with M = I - Z'E₋ⱼ(E₋ⱼ'PE₋ⱼ)⁻¹E₋ⱼ'Z(Z'Z)⁻¹.
            A = other @ Z @ np.linalg.inv(Z.T @ Z) / float(other @ P @ other)
            M = np.eye(L) - np.outer(Z.T @ other, A)
            S = M @ meat(hard, Z * left[:, None], kind, k) @ M.T
            g = Z.T @ u
            F = float(g @ np.linalg.pinv(S, rcond=1e-10) @ g) / (L - p + 1)
        test = column.stages[at].tests["conditional_f"]
        assert isinstance(test, TestResult)
        assert test.statistic == pytest.approx(F, rel=1e-7)
        assert test.df[0] == L - p + 1
        plain = column.stages[at].tests["robust_f"]
        assert isinstance(plain, TestResult)
        assert plain.df[0] == L


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("lagrange", [False, True])
def test_rank_statistics_are_the_published_formula(hard: Design, kind: str, lagrange: bool) -> None:
    """Θ̂ = G Π̂' F', its singular values, and the covariance of vec(Θ̂) by Kronecker products."""
    E, Z, q = flattened(hard)
    n, L, p = hard.n, Z.shape[1], 2
    G = np.linalg.cholesky(Z.T @ Z / n)
    F = np.linalg.inv(np.linalg.cholesky(E.T @ E / n))
    Pi = np.linalg.inv(Z.T @ Z) @ Z.T @ E
    theta = G.T @ Pi @ F.T
    U, _, Vt = np.linalg.svd(theta)
    U2, v2 = U[:, p - 1 :], Vt[p - 1 :].T
    u22, v22 = U2[p - 1 :], v2[p - 1 :]
    root = linalg.sqrtm(u22 @ u22.T).real
    A = U2 @ np.linalg.inv(u22) @ root
    B = np.sqrt(v22 @ v22.T) @ np.linalg.inv(v22.T) @ v2.T
    gap = (A.T @ theta @ B.T).ravel(order="F")
    V = E if lagrange else E - Z @ Pi
    z, v = np.linalg.solve(G, Z.T).T, V @ F.T
    rows = np.einsum("ni,nj->nij", v, z).reshape(n, -1)
    k = q + L
    if kind == "classical":
        spread = v.T @ v / (n if lagrange else n - k)
        W = np.kron(spread, z.T @ z / n)
    else:
        W = meat(hard, rows, "hc0" if lagrange and kind == "hc1" else kind, k) / n
        if lagrange and kind == "clustered":
            groups = len(np.unique(hard.clusters["acquirer"]))
            W = W / cluster_factor(n, groups, k)
    both = np.kron(B, A.T)
    rk = n * float(gap @ np.linalg.solve(both @ W @ both.T, gap))
    column = two_stage_least_squares(hard, options(kind))
    test = column.tests["underidentification" if lagrange else "rank_f"]
    assert isinstance(test, TestResult)
    assert test.df[0] == L - p + 1
    assert test.statistic == pytest.approx(rk if lagrange else rk / (L - p + 1), rel=1e-7)


def test_rank_f_under_equal_variances_is_cragg_and_donald_s(hard: Design) -> None:
    column = two_stage_least_squares(hard, options("classical"))
    test = column.tests["rank_f"]
    assert isinstance(test, TestResult)
    assert test.statistic * 3 / 4 == pytest.approx(column.fit["cragg_donald_f"], rel=1e-9)
