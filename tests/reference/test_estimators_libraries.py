"""A hard case run live against statsmodels and linearmodels.

Two instruments, controls in unlike units, two unbalanced fixed effects, uneven clusters in two
dimensions. Coefficients must agree to 1e-7. Standard errors do too once the one factor in which
the libraries follow another convention is put in, which each check states.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from linearmodels.iv import IV2SLS, IVGMM, IVLIML
from linearmodels.iv.absorbing import AbsorbingLS
from statsmodels.stats.diagnostic import het_breuschpagan, linear_reset
from statsmodels.stats.outliers_influence import OLSInfluence, variance_inflation_factor
from statsmodels.stats.stattools import jarque_bera

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import Estimate, TestResult
from pipeline.estimators.covariance import cluster_factor
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.least_squares import fixed_effects, ols
from pipeline.estimators.probit import Equation, fit_probit
from pipeline.estimators.selection import heckman_two_step
from tests.estimators.designs import deals, one_cluster_dimension, without
from tests.estimators.test_least_squares import dummies


@pytest.fixture(scope="module")
def hard() -> Design:
    design = deals(seed=23, candidates=700)
    rng = np.random.default_rng(23)
    weights = rng.dirichlet(np.full(25, 0.6))
    X = design.X.copy()
    X[:, 2] *= 1e4
    effects = {
        "industry": rng.choice(25, size=design.n, p=weights),
        "year": rng.integers(0, 6, size=design.n),
    }
    lone = np.bincount(effects["industry"])[effects["industry"]] == 1
    effects["industry"][lone] = effects["industry"][~lone][0]
    return replace(design, X=X, effects=effects)


def values(result: object) -> tuple[float, float]:
    assert isinstance(result, TestResult)
    return result.statistic, result.p_value


def frame(design: Design) -> pd.DataFrame:
    return pd.DataFrame(design.X, columns=list(design.names))


def agree(column: Estimate, params: object, errors: object, factor: float = 1.0) -> None:
    """Ours against theirs, ``factor`` being our variance over theirs by convention."""
    theirs, se = np.asarray(params), np.asarray(errors)
    k = len(column.names)
    np.testing.assert_allclose(column.coefficients, theirs[:k], rtol=1e-7, atol=1e-12)
    np.testing.assert_allclose(column.std_errors, se[:k] * np.sqrt(factor), rtol=1e-7)


@pytest.mark.parametrize("kind", ["HC0", "HC1", "HC2", "HC3"])
def test_robust_errors_against_statsmodels(hard: Design, kind: str) -> None:
    fit = sm.OLS(hard.y, hard.X).fit(cov_type=kind, use_t=True)
    column = ols(hard, FitOptions(covariance=kind.lower()))
    agree(column, fit.params, fit.bse)
    np.testing.assert_allclose(column.p_values, fit.pvalues, rtol=1e-6)
    np.testing.assert_allclose(column.intervals, fit.conf_int(), rtol=1e-6, atol=1e-12)


def test_clustered_errors_against_statsmodels(hard: Design) -> None:
    one = one_cluster_dimension(hard)
    fit = sm.OLS(one.y, one.X).fit(
        cov_type="cluster", cov_kwds={"groups": one.clusters["acquirer"]}, use_t=True
    )
    column = ols(one, FitOptions(cluster=True))
    agree(column, fit.params, fit.bse)
    np.testing.assert_allclose(column.p_values, fit.pvalues, rtol=1e-6)


def test_two_way_errors_against_statsmodels(hard: Design) -> None:
    groups = np.column_stack(list(hard.clusters.values()))
    fit = sm.OLS(hard.y, hard.X).fit(cov_type="cluster", cov_kwds={"groups": groups})
    agree(ols(hard, FitOptions(cluster=True)), fit.params, fit.bse)


@pytest.mark.parametrize("clustered", [False, True])
def test_diagnostics_against_statsmodels(hard: Design, clustered: bool) -> None:
    one = one_cluster_dimension(hard)
    options = FitOptions(cluster=True) if clustered else FitOptions(covariance="hc1")
    fit = sm.OLS(one.y, one.X).fit()
    column = ols(one, options)
    bp, p, *_ = het_breuschpagan(fit.resid, one.X)
    assert values(column.tests["breusch_pagan"]) == pytest.approx((bp, p), rel=1e-7)
    jb, p, *_ = jarque_bera(fit.resid)
    assert values(column.tests["jarque_bera"]) == pytest.approx((jb, p), rel=1e-7)
    kind = {"cov_type": "cluster", "cov_kwds": {"groups": one.clusters["acquirer"]}}
    reset = linear_reset(fit, 3, **(kind if clustered else {"cov_type": "HC1"}))
    # Theirs is the chi-squared with two degrees of freedom, twice our F.
    assert 2 * values(column.tests["reset"])[0] == pytest.approx(reset.statistic, rel=1e-6)
    assert column.fit["vif_treatment"] == pytest.approx(variance_inflation_factor(one.X, 1))
    influence = OLSInfluence(fit)
    assert column.fit["leverage_largest"] == pytest.approx(influence.hat_matrix_diag.max())
    assert column.fit["dfbetas_largest"] == pytest.approx(np.abs(influence.dfbetas[:, 1]).max())
    assert column.fit["r_squared"] == pytest.approx(fit.rsquared)
    assert column.fit["adjusted_r_squared"] == pytest.approx(fit.rsquared_adj)
    assert column.fit["sigma"] == pytest.approx(np.sqrt(fit.scale))


def test_joint_test_of_the_controls_against_statsmodels(hard: Design) -> None:
    fit = sm.OLS(hard.y, hard.X).fit(cov_type="HC3", use_t=True)
    theirs = fit.f_test(np.eye(5)[2:])
    ours = values(ols(hard, FitOptions()).tests["joint_controls"])
    assert ours == pytest.approx((float(theirs.fvalue), float(theirs.pvalue)), rel=1e-6)


def test_two_effects_against_linearmodels(hard: Design) -> None:
    one = one_cluster_dimension(hard)
    absorb = pd.DataFrame({k: pd.Categorical(c) for k, c in one.effects.items()})
    fit = AbsorbingLS(one.y, frame(one).iloc[:, 1:], absorb=absorb).fit(
        cov_type="clustered", clusters=one.clusters["acquirer"], debiased=False
    )
    column = fixed_effects(one, FitOptions())
    # Theirs has no small-sample factor when not asked to debias.
    agree(column, fit.params, fit.std_errors, column.fit["small_sample_factor"])
    assert column.fit["r_squared"] == pytest.approx(fit.rsquared, rel=1e-8)


def test_two_effects_against_indicators_in_statsmodels(hard: Design) -> None:
    one = one_cluster_dimension(hard)
    wide = dummies(one)
    fit = sm.OLS(wide.y, wide.X).fit(
        cov_type="cluster", cov_kwds={"groups": one.clusters["acquirer"]}
    )
    # No effect is nested in the acquirers, so every indicator counts in both.
    agree(fixed_effects(one, FitOptions()), fit.params[1:], fit.bse[1:])


def iv(design: Design) -> tuple[pd.Series, pd.DataFrame, pd.DataFrame, pd.DataFrame]:
    wide = dummies(design)
    table = frame(wide)
    exogenous = table.drop(columns=design.treatment)
    instruments = pd.DataFrame(design.Z, columns=list(design.instruments))
    return pd.Series(design.y, name="y"), exogenous, table[[design.treatment]], instruments


def ordered(fit: Any, column: Estimate) -> tuple[list[float], list[float]]:
    return (
        [float(fit.params[name]) for name in column.names],
        [float(fit.std_errors[name]) for name in column.names],
    )


@pytest.mark.parametrize("kind", ["clustered", "hc1", "classical"])
def test_two_stages_with_effects_against_linearmodels(hard: Design, kind: str) -> None:
    one = one_cluster_dimension(hard)
    y, exogenous, endogenous, z = iv(one)
    model = IV2SLS(y, exogenous, endogenous, z)
    if kind == "clustered":
        column = two_stage_least_squares(one, FitOptions())
        fit: Any = model.fit(
            cov_type="clustered", clusters=one.clusters["acquirer"], debiased=False
        )
        k = exogenous.shape[1] + 1
        groups = column.clusters["acquirer"]
        # Theirs carries no factor unless debiased.
        factor = cluster_factor(one.n, groups, k)
    else:
        column = two_stage_least_squares(one, FitOptions(covariance=kind))
        name = "unadjusted" if kind == "classical" else "robust"
        fit, factor = model.fit(cov_type=name, debiased=True), 1.0
    params, errors = ordered(fit, column)
    agree(column, params, errors, factor)
    if kind == "classical":
        assert values(column.tests["overidentification"]) == pytest.approx(
            (fit.sargan.stat, fit.sargan.pval), rel=1e-6
        )
        # wu_hausman counts the effects' indicators as we count the effects.
        theirs = fit.wu_hausman()
        t, p = values(column.tests["wu_hausman"])
        assert (t**2, p) == pytest.approx((theirs.stat, theirs.pval), rel=1e-6)
    if kind == "hc1":
        check_first_stage(column, fit, one)


def check_first_stage(column: Estimate, fit: Any, design: Design) -> None:
    row = fit.first_stage.diagnostics.loc[design.treatment]
    assert column.fit["partial_r_squared"] == pytest.approx(row["partial.rsquared"])
    # Theirs is the chi-squared W; ours is W/L, an F.
    robust, L = values(column.tests["robust_f"])[0], len(design.instruments)
    assert robust * L == pytest.approx(row["f.stat"], rel=1e-6)


@pytest.mark.parametrize("clustered", [False, True])
def test_overidentification_against_two_step_moments(hard: Design, clustered: bool) -> None:
    one = one_cluster_dimension(hard)
    y, exogenous, endogenous, z = iv(one)
    extra = {"clusters": one.clusters["acquirer"]} if clustered else {}
    model = IVGMM(
        y,
        exogenous,
        endogenous,
        z,
        weight_type="clustered" if clustered else "robust",
        center=False,
        **extra,
    )
    # Two steps from the identity's first step would differ: start from two-stage weights.
    W = np.column_stack([exogenous, z])
    fit: Any = model.fit(iter_limit=2, initial_weight=np.linalg.inv(W.T @ W / len(W)))
    options = FitOptions() if clustered else FitOptions(covariance="hc0")
    column = two_stage_least_squares(one, options)
    assert values(column.tests["overidentification"]) == pytest.approx(
        (fit.j_stat.stat, fit.j_stat.pval), rel=1e-5
    )


@pytest.mark.parametrize("fuller", [0, 1])
def test_limited_information_against_linearmodels(hard: Design, fuller: int) -> None:
    y, exogenous, endogenous, z = iv(hard)
    fit = IVLIML(y, exogenous, endogenous, z, fuller=fuller).fit()
    column = two_stage_least_squares(hard, FitOptions())
    mine = column.fit["fuller" if fuller else "liml"]
    assert mine == pytest.approx(float(fit.params[hard.treatment]), rel=1e-6)


@pytest.mark.parametrize("kind", ["nonrobust", "HC0", "cluster"])
def test_probit_against_statsmodels(hard: Design, kind: str) -> None:
    s = hard.selection
    assert s is not None
    groups = s.clusters["acquirer"]
    extra = {"cov_kwds": {"groups": groups}} if kind == "cluster" else {}
    fit = sm.Probit(s.selected.astype(float), s.W).fit(disp=0, tol=1e-14, cov_type=kind, **extra)
    options = {
        "nonrobust": FitOptions(),
        "HC0": FitOptions(covariance="hc0"),
        "cluster": FitOptions(cluster=True),
    }[kind]
    (stage,) = heckman_two_step(hard, options).stages
    factor = 1.0
    if kind == "cluster":
        # Ours is the factor of maximum likelihood, G/(G-1); theirs counts k too.
        count = len(np.unique(groups))
        factor = count / (count - 1) / cluster_factor(len(groups), count, s.W.shape[1])
    np.testing.assert_allclose(stage.coefficients, fit.params, rtol=1e-8)
    np.testing.assert_allclose(stage.std_errors, fit.bse * np.sqrt(factor), rtol=1e-6)
    assert stage.fit["pseudo_r_squared"] == pytest.approx(fit.prsquared)
    assert stage.fit["log_likelihood"] == pytest.approx(fit.llf)
    if kind == "nonrobust":
        margins = fit.get_margeff().margeff
        mine = [stage.fit[f"marginal_effect.{name}"] for name in s.names[1:]]
        np.testing.assert_allclose(mine, margins, rtol=1e-6)
        index = np.asarray(fit.fittedvalues)
        np.testing.assert_allclose(
            fit_probit(Equation(s.selected, s.W, s.names, "a", s.names[-1])).index,
            index,
            rtol=1e-6,
            atol=1e-9,
        )


def test_without_effects_against_linearmodels(hard: Design) -> None:
    bare = without(hard, "effects", "clusters")
    table = frame(bare)
    fit = IV2SLS(
        bare.y, table.drop(columns="paid_in_shares"), table[["paid_in_shares"]], bare.Z
    ).fit(cov_type="robust", debiased=True)
    column = two_stage_least_squares(bare, FitOptions())
    agree(column, *ordered(fit, column))
    assert column.df == bare.n - 5
