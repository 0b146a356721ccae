"""Few-cluster errors, the wild bootstrap, LIML, Fuller and GMM against values made elsewhere.

Values and sources stand in ``estimators.json`` and ``wild_cluster.json``; the last part runs
linearmodels live on a hard case: two instruments, two effects, uneven clusters.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from linearmodels.iv import IVGMM, IVLIML

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import Estimate, TestResult
from pipeline.estimators import wild
from pipeline.estimators.covariance import cluster_factor
from pipeline.estimators.errors import CLUSTER, ErrorRule
from pipeline.estimators.gmm import two_step_gmm
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.k_class import STOCK_YOGO_LIML_SIZE, fuller, limited_information
from pipeline.estimators.least_squares import ols
from pipeline.estimators.sample import plain
from tests.estimators.designs import deals, one_cluster_dimension
from tests.estimators.test_least_squares import dummies
from tests.reference import public_data as data

HERE = Path(__file__).parent
CASES: Mapping[str, Any] = {
    name: case
    for file in ("estimators.json", "wild_cluster.json")
    for name, case in json.loads((HERE / file).read_text(encoding="utf-8"))["cases"].items()
}


def compare(case: str, found: Mapping[str, Any]) -> None:
    """Each value within the tolerance of its entry."""
    for key, value in found.items():
        entry = CASES[case]["expected"][key]
        ours, theirs = np.asarray(value, dtype=float), np.asarray(entry["value"], dtype=float)
        allowed = np.maximum(entry.get("abs_tol", 0.0), entry.get("rel_tol", 0.0) * abs(theirs))
        assert (abs(ours - theirs) <= allowed).all(), f"{case} {key}: {ours}, {entry}"


# Source: the clubSandwich package in R, 136 four-digit industries of very uneven size.
def test_cr2_of_innovation() -> None:
    design = data.innovation([], ["industry"])
    column = ols(design, FitOptions(covariance="cr2"))
    error = column.term("institutions")["std_error"]
    compare("innovation_clusters", {"i.se_industry_CR2": error, "i.CR2_df": column.df})


# Sources: numpy enumeration of all 2^10 sign vectors; wildboottest 0.3.2 and pyfixest 0.60 for
# the strict p, which leaves out the data themselves and their mirror image.
def test_wild_bootstrap_of_grunfeld() -> None:
    design = data.grunfeld()
    codes = data.grunfeld("firm").effects["firm"]
    found = {}
    for name in ("capital", "value"):
        asked = replace(design, treatment=name, effects={}, clusters={"firm": codes})
        sample = plain(asked, ErrorRule(CLUSTER, dict(asked.clusters), asked.n))
        result = wild.bootstrap(sample, asked, codes)
        assert (result.enumerated, result.draws) == (True, 1024)
        found[f"{name}.t"] = result.statistic
        found[f"{name}.p_including_ties(|t*|>=|t|)"] = result.p_value
        found[f"{name}.p_strict(|t*|>|t|)"] = result.p_value - 2 / 1024
    found["capital.p_wildboottest_WCR11"] = found["capital.p_strict(|t*|>|t|)"]
    compare("grunfeld_wild", found)


# Sources: linearmodels 7.1, R ivmodel 1.9.1 and gretl.
def test_other_weights_of_parents_schooling() -> None:
    design = data.parents_schooling()
    classical, robust = FitOptions(covariance="classical"), FitOptions(covariance="hc0")
    liml, gmm = limited_information(design, classical), two_step_gmm(design, robust)
    term, moments = liml.term("educ"), gmm.term("educ")
    j = gmm.tests["overidentification"]
    assert isinstance(j, TestResult)
    compare(
        "parents_schooling",
        {
            "liml.coef": term["coefficient"],
            "liml.kappa": liml.fit["kappa"],
            "liml.se_iid_df(n-k)": term["std_error"],
            "liml.se_iid_n": term["std_error"] * np.sqrt(liml.df / liml.n),
            "fuller1.coef": fuller(design, classical).term("educ")["coefficient"],
            "gmm_2step.coef": moments["coefficient"],
            "gmm_2step.se": moments["std_error"],
            "gmm_2step.HansenJ": j.statistic,
            "gmm_2step.J_p": j.p_value,
        },
    )


# Source: gretl's print of Stock and Yogo (2005), table 5.4.
def test_stock_yogo_sizes_of_limited_information() -> None:
    for case, L in (("weak_instrument_constants", 2), ("weak_instrument_constants_second", 3)):
        compare(case, {f"stock_yogo_LIML_size_K{L}": STOCK_YOGO_LIML_SIZE[L]})


@pytest.fixture(scope="module")
def hard() -> Design:
    design = one_cluster_dimension(deals(seed=23, candidates=700))
    X = design.X.copy()
    X[:, 2] *= 1e4
    return replace(design, X=X)


def iv(design: Design) -> tuple[Any, ...]:
    wide = dummies(design)
    table = pd.DataFrame(wide.X, columns=list(wide.names))
    instruments = pd.DataFrame(design.Z, columns=list(design.instruments))
    exogenous = table.drop(columns=design.treatment)
    return pd.Series(design.y), exogenous, table[[design.treatment]], instruments


def theirs(fit: Any, column: Estimate) -> tuple[np.ndarray, np.ndarray]:
    names = list(column.names)
    return fit.params[names].to_numpy(), fit.std_errors[names].to_numpy()


@pytest.mark.parametrize("a", [0, 1])
def test_k_class_against_linearmodels(hard: Design, a: int) -> None:
    fit = IVLIML(*iv(hard), fuller=a).fit(cov_type="unadjusted", debiased=True)
    estimator = fuller if a else limited_information
    column = estimator(hard, FitOptions(covariance="classical"))
    params, errors = theirs(fit, column)
    np.testing.assert_allclose(column.coefficients, params, rtol=1e-6)
    np.testing.assert_allclose(column.std_errors, errors, rtol=1e-6)
    assert column.fit["kappa"] == pytest.approx(fit.kappa, rel=1e-10)


# Robust errors: linearmodels puts X̂u in the middle of the sandwich, ours the moments that are
# solved, (X - κMX)u. Both are right in large samples; at κ near one they are close.
@pytest.mark.parametrize("kind", ["robust", "clustered"])
def test_robust_k_class_is_close_to_linearmodels(hard: Design, kind: str) -> None:
    extra = {"clusters": hard.clusters["acquirer"]} if kind == "clustered" else {}
    model = IVLIML(*iv(hard))
    fit = model.fit(cov_type=kind, debiased=False, **extra)
    options = FitOptions() if kind == "clustered" else FitOptions(covariance="hc0")
    column = limited_information(hard, options)
    params, errors = theirs(fit, column)
    factor = column.fit["small_sample_factor"]
    np.testing.assert_allclose(column.coefficients, params, rtol=1e-6)
    np.testing.assert_allclose(column.std_errors, errors * np.sqrt(factor), rtol=2e-3)


@pytest.mark.parametrize("clustered", [False, True])
def test_gmm_against_linearmodels(hard: Design, clustered: bool) -> None:
    """Every coefficient and error, effects and controls in the moments on their side."""
    extra = {"clusters": hard.clusters["acquirer"]} if clustered else {}
    y, exogenous, endogenous, z = iv(hard)
    kind = "clustered" if clustered else "robust"
    model = IVGMM(y, exogenous, endogenous, z, weight_type=kind, center=False, **extra)
    W = np.column_stack([exogenous, z])
    fit: Any = model.fit(
        iter_limit=2,
        initial_weight=np.linalg.inv(W.T @ W / len(W)),
        cov_type=kind,
        debiased=False,
        **extra,
    )
    column = two_step_gmm(hard, FitOptions() if clustered else FitOptions(covariance="hc0"))
    params, errors = theirs(fit, column)
    factor = 1.0
    if clustered:
        (groups,) = column.clusters.values()
        factor = cluster_factor(hard.n, groups, exogenous.shape[1] + 1)
    np.testing.assert_allclose(column.coefficients, params, rtol=1e-5)
    np.testing.assert_allclose(column.std_errors, errors * np.sqrt(factor), rtol=1e-5)
    j = column.tests["overidentification"]
    assert isinstance(j, TestResult)
    assert (j.statistic, j.p_value) == pytest.approx((fit.j_stat.stat, fit.j_stat.pval), rel=1e-5)
    plain_weights = two_stage_least_squares(hard, FitOptions())
    assert abs(column.coefficients[0] / plain_weights.coefficients[0] - 1) > 1e-4
