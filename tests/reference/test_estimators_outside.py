"""Estimates on public data against values computed or printed elsewhere.

``estimators.json`` holds each value with its source, its kind (computed with the software named,
printed in the source named, or from memory) and its tolerance: |x - value| ≤ max(abs_tol,
rel_tol·|value|). Every value of a case is either compared here or listed as not ours to make.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import replace
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import Estimate, Shape, TestResult
from pipeline.estimators import covariance as cov
from pipeline.estimators import effective_f as strength
from pipeline.estimators.instrument_tests import STOCK_YOGO_SIZE
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.least_squares import fixed_effects, ols
from pipeline.estimators.selection import heckman_two_step
from tests.reference import public_data as data

CASES: Mapping[str, Any] = json.loads(
    (Path(__file__).parent / "estimators.json").read_text(encoding="utf-8")
)["cases"]
NOT_OURS = (
    "se_naive",
    "se_lambda_if_probit_cov",
    "durbin",
    "CLR",
    "basmann",
    "wooldridge_robust",
    "gmm_2step.coef",
    "gmm_2step.se",
    "liml.se",
    "FamaMacBeth",
    "stock_yogo_LIML",
    "stock_yogo_TSLS_bias",
    "own_size_check",
    "i.se_industry_CR2",
    "i.CR2_df",
)
"""What the package does not offer, or what ``test_weights_and_clusters_outside`` compares, by a
part of its key."""


def compare(case: str, found: Mapping[str, Any]) -> None:
    """Each value of the case within its tolerance, and none left unlooked at."""
    expected = CASES[case]["expected"]
    unseen = [
        key for key in expected if key not in found and not any(mark in key for mark in NOT_OURS)
    ]
    assert not unseen, f"{case}: no value compared for {unseen}"
    for key, value in found.items():
        entry = expected[key]
        if isinstance(entry["value"], str):
            assert value == entry["value"], f"{case} {key}"
            continue
        ours, theirs = _flat(value), _flat(entry["value"])
        allowed = np.maximum(
            entry.get("abs_tol") or 0.0, (entry.get("rel_tol") or 0.0) * np.abs(theirs)
        )
        assert (np.abs(ours - theirs) <= allowed).all(), (
            f"{case} {key}: {ours}, expected {theirs} by {entry['by']}"
        )


def _flat(value: Any) -> np.ndarray:
    if isinstance(value, Mapping):
        value = [value[key] for key in sorted(value)]
    return np.atleast_1d(np.asarray(value, dtype=float))


def terms(prefix: str, column: Estimate, field: str, **renamed: str) -> dict[str, float]:
    return {
        f"{prefix}.{renamed.get(name, name)}": column.term(name)[field] for name in column.names
    }


def two_steps(design: Design, *, form: bool = False) -> tuple[Estimate, dict[str, Any]]:
    column = heckman_two_step(design, FitOptions(allow_functional_form=form))
    (probit,) = column.stages
    return column, {
        **terms("coef", column, "coefficient", inverse_mills="lambda"),
        **terms("se", column, "std_error", inverse_mills="lambda"),
        **terms("probit", probit, "coefficient"),
        **terms("probit_se", probit, "std_error"),
        "rho": column.fit["rho"],
        "sigma": column.fit["sigma"],
        "n": column.fit["candidates"],
        "n_selected": column.n,
    }


# Sources: R sampleSelection 1.2-12, gretl 2022c and an independent numpy implementation agree;
# published in Wooldridge (2003), example 17.5, and Cameron and Trivedi (2005), table 16.1.
@pytest.mark.parametrize(
    ("case", "form"), [("mroz_two_step", False), ("health_expenditure_two_step", True)]
)
def test_heckman_two_step(case: str, form: bool) -> None:
    design = data.mroz_log_wage() if not form else data.health_expenditure()
    column, found = two_steps(design, form=form)
    compare(case, found)
    for name in column.names:
        label = "lambda" if name == "inverse_mills" else name
        naive = CASES[case]["expected"][f"se_naive.{label}"]["value"]
        assert abs(found[f"se.{label}"] / naive - 1) > 1e-5, "the second step's own error"


# Source: test output printed in the micEcon package, headed Greene (2003), example 22.8; its
# probit stops early and takes the expected information, hence 5e-4.
def test_heckman_two_step_on_the_wage_level() -> None:
    _, found = two_steps(data.mroz_wage_level())
    wanted = CASES["mroz_wage_level_two_step"]["expected"]
    compare("mroz_wage_level_two_step", {key: found[key] for key in wanted if key in found})


# Sources: R sampleSelection, gretl and scipy, full maximum likelihood. Both are consistent, so
# they may not lie more than two standard errors apart.
@pytest.mark.parametrize(
    ("case", "build"),
    [("mroz_likelihood", data.mroz_log_wage), ("mroz_wage_level_likelihood", data.mroz_wage_level)],
)
def test_two_steps_agree_with_the_likelihood(case: str, build: Any) -> None:
    column, found = two_steps(build())
    expected = CASES[case]["expected"]
    for key, entry in expected.items():
        if not key.startswith("coef."):
            continue
        name = key.removeprefix("coef.")
        stem = "probit" if name.startswith("S:") else "coef"
        name = name.removeprefix("S:")
        se = found[f"{'probit_se' if stem == 'probit' else 'se'}.{name}"]
        assert abs(found[f"{stem}.{name}"] - entry["value"]) < 2 * se
    assert np.sign(column.fit["rho"]) == np.sign(expected["rho"]["value"])


INSTRUMENTS = {
    "college_proximity": (data.college_proximity, ("nearc4",)),
    "father_schooling": (data.father_schooling, ("fatheduc",)),
    "parents_schooling": (data.parents_schooling, ("fatheduc", "motheduc")),
    "cigarette_price": (data.cigarette_price, ("cigprice",)),
}
KINDS = {Shape.INTERVAL: "interval", Shape.LINE: "whole_line", Shape.RAYS: "two_rays"}


@cache
def instrumented(case: str, kind: str) -> Estimate:
    return two_stage_least_squares(INSTRUMENTS[case][0](), FitOptions(covariance=kind))


def result(column: Estimate, key: str) -> TestResult:
    found = column.tests[key]
    assert isinstance(found, TestResult)
    return found


def second_stage(case: str) -> dict[str, Any]:
    design = INSTRUMENTS[case][0]()
    treatment = design.treatment
    classical, hc0, hc1 = (instrumented(case, kind) for kind in ("classical", "hc0", "hc1"))
    plain = ols(design, FitOptions(covariance="classical")).term(treatment)
    term = classical.term(treatment)
    return {
        "n": classical.n,
        "ols.coef": plain["coefficient"],
        "ols.se": plain["std_error"],
        "2sls.coef": term["coefficient"],
        "2sls.se_iid_df(n-k)": term["std_error"],
        # Divisor n instead of n - k.
        "2sls.se_iid_n": term["std_error"] * np.sqrt(classical.df / classical.n),
        "2sls.se_HC0": hc0.term(treatment)["std_error"],
        "2sls.se_HC1": hc1.term(treatment)["std_error"],
        "2sls.coef.(Intercept)": classical.term("const")["coefficient"],
        **{
            f"2sls.coef.{name}": classical.term(name)["coefficient"]
            for name in ("exper", "expersq")
            if f"2sls.coef.{name}" in CASES[case]["expected"]
        },
    }


def first_stage(case: str) -> dict[str, Any]:
    classical, hc0, hc1 = (instrumented(case, kind) for kind in ("classical", "hc0", "hc1"))
    first = classical.stages[0]
    found = {
        "first.partial_R2": classical.fit["partial_r_squared"],
        "first.F_iid": result(classical, "homoskedastic_f").statistic,
        "first.F_HC0": result(hc0, "robust_f").statistic,
        "first.F_HC1": result(hc1, "robust_f").statistic,
    }
    for name in INSTRUMENTS[case][1]:
        found[f"first.coef.{name}"] = first.term(name)["coefficient"]
        found[f"first.se.{name}"] = first.term(name)["std_error"]
    return found


def weak_and_endogenous(case: str) -> dict[str, Any]:
    classical = instrumented(case, "classical")
    endogeneity, ar = result(classical, "wu_hausman"), result(classical, "anderson_rubin")
    robust = classical.sets["anderson_rubin"]
    found: dict[str, Any] = {
        "wu_hausman.F": endogeneity.statistic**2,
        "wu_hausman.p": endogeneity.p_value,
        "AR.F_at_0": ar.statistic,
        "AR.p_at_0": ar.p_value,
        "AR.set_kind": KINDS[robust.shape],
    }
    if robust.shape is Shape.INTERVAL:
        found["AR.set95"] = [robust.low, robust.high]
    return found


def several(case: str) -> dict[str, Any]:
    classical, hc0, hc1 = (instrumented(case, kind) for kind in ("classical", "hc0", "hc1"))
    sargan, hansen = (result(column, "overidentification") for column in (classical, hc0))
    return {
        "sargan": sargan.statistic,
        "sargan.p": sargan.p_value,
        "gmm_2step.HansenJ": hansen.statistic,
        "gmm_2step.J_p": hansen.p_value,
        "liml.coef": classical.fit["liml"],
        "liml.kappa": classical.fit["liml_kappa"],
        "fuller1.coef": classical.fit["fuller"],
        "effF_MOP_HC0": result(hc0, "effective_f").statistic,
        "effF_MOP_HC1": result(hc1, "effective_f").statistic,
    }


# Sources: R lm, AER 1.2.10, ivmodel; gretl 2022c; linearmodels 7.1; pyfixest 0.60; numpy. The
# whole line in the cigarette case is the one a fixed grid would have cut to an interval.
@pytest.mark.parametrize("case", INSTRUMENTS)
def test_instruments(case: str) -> None:
    found = {**second_stage(case), **first_stage(case), **weak_and_endogenous(case)}
    if len(INSTRUMENTS[case][1]) > 1:
        found |= several(case)
    compare(case, found)
    for kind in ("classical", "hc0", "hc1"):
        column = instrumented(case, kind)
        if len(INSTRUMENTS[case][1]) == 1:
            assert result(column, "effective_f").statistic == pytest.approx(
                result(column, "robust_f").statistic, rel=1e-10
            )


# Sources: gretl's print of Stock and Yogo (2005); scipy for Montiel Olea and Pflueger (2013);
# table 3 and abstract of Lee, McCrary, Moreira and Porter (2022).
def test_weak_instrument_constants() -> None:
    single = np.eye(1)
    compare(
        "weak_instrument_constants",
        {
            "stock_yogo_TSLS_size_K1": STOCK_YOGO_SIZE[1],
            "stock_yogo_TSLS_size_K2": STOCK_YOGO_SIZE[2],
            "MOP_crit_Keff1": {
                f"tau{share}%": strength.critical_value(single, share / 100)
                for share in strength.BIAS_SHARES
            },
            "tF_crit_by_sqrtF": critical_ts("weak_instrument_constants"),
            "F_for_valid_5pct_at_1.96": strength.STRONG,
            "t_crit_if_F_threshold_10": strength.size_corrected_critical(10.0),
        },
    )
    compare(
        "weak_instrument_constants_second",
        {
            "stock_yogo_TSLS_size_K3": STOCK_YOGO_SIZE[3],
            "tF_crit_by_sqrtF": critical_ts("weak_instrument_constants_second"),
            "tF_se_multiplier_at_F=10.24": strength.size_corrected_critical(10.24) / 1.96,
        },
    )


def critical_ts(case: str) -> dict[str, float]:
    roots = CASES[case]["expected"]["tF_crit_by_sqrtF"]["value"]
    return {root: strength.size_corrected_critical(float(root) ** 2) for root in roots}


# Sources: R sandwich 3.0.2, statsmodels 0.15, pyfixest 0.60; printed to four digits on Petersen's
# page of test data: firm .0506, year .0334, both .0536.
def test_clusters_of_a_firm_year_panel() -> None:
    design = data.firm_year_panel()
    found = terms("coef", ols(design, FitOptions(covariance="classical")), "coefficient")
    labels = {
        "classical": "se_iid",
        "hc0": "se_HC0",
        "hc1": "se_HC1_white",
        "hc2": "se_HC2",
        "hc3": "se_HC3",
    }
    for kind, label in labels.items():
        found |= terms(label, ols(design, FitOptions(covariance=kind)), "std_error")
    for name in ("firm", "year"):
        one = replace_clusters(design, name)
        found |= terms(f"se_{name}_CR1_stata", ols(one, FitOptions(cluster=True)), "std_error")
    both = ols(design, FitOptions(cluster=True))
    found |= terms("se_firm_year_twoway_each_dimension_own_G", both, "std_error")
    found["se_twoway_min_G_convention.x"] = smallest_count_error(design, both, 1, k=2)
    compare("firm_year_panel", found)
    assert both.df == 9


def replace_clusters(design: Design, *names: str) -> Design:
    return replace(design, clusters={name: design.clusters[name] for name in names})


def smallest_count_error(design: Design, column: Estimate, at: int, k: int) -> float:
    """The two-way error if every part took the factor of the smaller number of clusters."""
    assert column.scores is not None
    first, second = design.clusters.values()
    total = 0.0
    for sign, codes in ((1, first), (1, second), (-1, cov.intersection(first, second))):
        groups = len(np.unique(codes))
        part = cov.cluster_covariance(column.scores, codes, k)[at, at]
        total += sign * part / (groups / (groups - 1))
    fewest = min(column.clusters.values())
    return float(np.sqrt(total * fewest / (fewest - 1)))


# Sources: R plm 2.6.2, sandwich 3.0.2, pyfixest 0.60, linearmodels 7.1. The four conventions for
# one model differ by the number k of coefficients in the factor: ours counts the constant and
# every effect not nested in the clusters.
def test_effects_and_clusters_of_grunfeld() -> None:
    one, two = data.grunfeld("firm"), data.grunfeld("firm", "year")
    clustered, iid = fixed_effects(one, FitOptions()), FitOptions(covariance="classical")
    found = {
        **terms("coef", clustered, "coefficient"),
        **terms("se_iid", fixed_effects(one, iid), "std_error"),
        **terms("se_cluster_firm_FE_nested_not_counted(pyfixest/reghdfe)", clustered, "std_error"),
        **terms("tw_coef", fixed_effects(two, FitOptions()), "coefficient"),
        **terms("tw_se_iid", fixed_effects(two, iid), "std_error"),
        **other_counts("se_cluster_firm_CR0", clustered, None),
        **other_counts("se_cluster_firm_dummies_counted(LSDV Stata regress)", clustered, 12),
        **terms_scaled("se_cluster_firm_linearmodels_debiased", clustered, 200 / 198),
        # This source leaves the year effects out of k although no firm contains them.
        **other_counts("tw_se_cluster_firm", fixed_effects(two, FitOptions()), 3),
    }
    compare("grunfeld_effects", found)


def other_counts(prefix: str, column: Estimate, k: int | None) -> dict[str, float]:
    """Our clustered errors carried to another k; None drops the whole factor (CR0)."""
    (groups,) = column.clusters.values()
    return terms_scaled(
        prefix, column, 1.0 if k is None else cov.cluster_factor(column.n, groups, k)
    )


def terms_scaled(prefix: str, column: Estimate, factor: float) -> dict[str, float]:
    scale = np.sqrt(factor / column.fit["small_sample_factor"])
    return {key: value * scale for key, value in terms(prefix, column, "std_error").items()}


# Sources: pyfixest 0.60 (year effects left out of k), linearmodels 7.1 (all effects in k, no
# G/(G-1)), R plm (no factor).
def test_effects_and_clusters_of_a_wage_panel() -> None:
    column = fixed_effects(data.wage_panel(), FitOptions())
    compare(
        "wage_panel_effects",
        {
            **terms("coef", column, "coefficient"),
            **other_counts("se_cluster_pyfixest", column, 4 + 1),
            **terms_scaled("se_cluster_linearmodels", column, column.n / (column.n - 4 - 552)),
            **other_counts("se_cluster_CR0", column, None),
        },
    )
    assert column.fit["counted"] == 8


# Sources: R lm and sandwich 3.0.2 without effects, pyfixest 0.60 with them. No company is alone,
# so nothing is set aside; company effects are nested in their clusters, year effects count.
def test_clusters_of_innovation() -> None:
    treatment = "institutions"

    def error(clusters: list[str]) -> float:
        column = ols(data.innovation([], clusters), FitOptions(cluster=True))
        return float(column.term(treatment)["std_error"])

    plain = ols(data.innovation([], []), FitOptions())
    design = data.innovation(["industry", "year"], ["company", "year"])
    both = fixed_effects(design, FitOptions())
    single = fixed_effects(replace_clusters(design, "company"), FitOptions())
    deep = fixed_effects(data.innovation(["company", "year"], ["company"]), FitOptions())
    assert both.fit["counted"] == 136
    compare(
        "innovation_clusters",
        {
            "i.coef.institutions": plain.term(treatment)["coefficient"],
            "i.se_industry_CR1": error(["industry"]),
            "i.se_firm_CR1": error(["company"]),
            "i.se_industry_year_twoway": error(["industry", "year"]),
            "ii.coef": both.term(treatment)["coefficient"],
            "ii.se_company": single.term(treatment)["std_error"],
            # This source counts no effect at all once years are clusters; we count the industries.
            "ii.se_company_year(min G)": smallest_count_error(design, both, 0, k=3 + 1),
            "iii.coef": deep.term(treatment)["coefficient"],
            "iii.se_company": deep.term(treatment)["std_error"],
            "iii.N_after_singletons": deep.n,
        },
    )


# Source: R sandwich 3.0.2 and R lm.
def test_robust_errors_of_takeover_bids() -> None:
    design = data.takeover_bids()
    found: dict[str, float] = {}
    for kind, label in (
        ("classical", "iid"),
        ("hc0", "HC0"),
        ("hc1", "HC1"),
        ("hc2", "HC2"),
        ("hc3", "HC3"),
    ):
        column = ols(design, FitOptions(covariance=kind))
        found |= terms(label, column, "std_error", const="(Intercept)")
    found |= terms("coef", column, "coefficient", const="(Intercept)")
    compare("takeover_bids", {**found, "r2": column.fit["r_squared"]})
