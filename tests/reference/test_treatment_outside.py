"""Treatments and their bounds against values computed elsewhere, and against libraries live.

``treatment.json`` holds each value with the software that made it and its tolerance:
|x - value| ≤ max(abs_tol, rel_tol·|value|).
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import statsmodels.api as sm
from causaldata import nsw_mixtape
from linearmodels.iv import IV2SLS
from scipy import optimize, stats
from sklearn.neighbors import NearestNeighbors

from pipeline.core.design import Design, FitOptions
from pipeline.estimators.bounds import bounds_of
from pipeline.estimators.doubly_robust import doubly_robust
from pipeline.estimators.least_squares import ols
from pipeline.estimators.matching import matching, matching_treated
from pipeline.estimators.propensity import fit_logit, observed
from pipeline.estimators.treatment import fitted_probability_instrument, treatment_two_step
from pipeline.estimators.treatment_ml import treatment_likelihood
from pipeline.estimators.weighting import entropy_balancing, weighting, weighting_treated
from tests.estimators.designs import deals, without
from tests.reference import public_data as data

CASES = json.loads((Path(__file__).parent / "treatment.json").read_text(encoding="utf-8"))["cases"]
COVARIATES = ("age", "educ", "black", "hispan", "married", "nodegree", "re74", "re75")


def compare(case: str, found: dict[str, Any]) -> None:
    """Every value of the case within its tolerance, and none left out."""
    expected = CASES[case]["expected"]
    assert set(found) == set(expected)
    for key, value in found.items():
        entry = expected[key]
        theirs = np.atleast_1d(np.asarray(entry["value"], dtype=float))
        allowed = np.maximum(entry.get("abs_tol") or 0, (entry.get("rel_tol") or 0) * abs(theirs))
        assert (np.abs(np.atleast_1d(value) - theirs) <= allowed).all(), (
            f"{case} {key}: {value}, expected {theirs} by {entry['by']}"
        )


def observational() -> Design:
    table = data.frame("MatchIt", "lalonde")
    table = table.assign(
        black=(table.race == "black").astype(float), hispan=(table.race == "hispan").astype(float)
    )
    return data.design(table, "re78", ["treat", *COVARIATES])


def chosen() -> Design:
    table = data.frame("Ecdat", "Treatment")
    table = table[table.re78 > 0]
    table = table.assign(
        log_re78=np.log(table.re78),
        age2=table.age**2,
        hispanic=(table.ethn == "hispanic").astype(float),
        other=(table.ethn == "other").astype(float),
    ).astype({"treat": float, "u74": float, "u75": float})
    regressors = ["treat", "age", "age2", "educ", "hispanic", "other"]
    return data.design(table, "log_re78", regressors, instruments=["u74", "u75"])


# Sources: R lm and sandwich; published 1794 (633) in Dehejia and Wahba (1999), from memory.
def test_training_experiment() -> None:
    table = nsw_mixtape.load_pandas().data.drop(columns="data_id")
    # Small integers, and money in single precision: read as the decimals it stands for.
    table = table.astype(str).astype(float)
    plain = data.design(table, "re78", ["treat"])
    errors = {
        kind: ols(plain, FitOptions(covariance=kind)).term("treat")["std_error"]
        for kind in ("classical", "hc1", "hc2", "hc3")
    }
    table = table.assign(agesq=table.age**2)
    controls = ["age", "agesq", "educ", "nodegree", "black", "hisp", "marr", "re74", "re75"]
    full = ols(data.design(table, "re78", ["treat", *controls]), FitOptions(covariance="hc1"))
    effect = ols(plain, FitOptions())
    intercept = effect.term("const")["coefficient"]
    ate = effect.term("treat")["coefficient"]
    compare(
        "training_experiment",
        {
            "ate": ate,
            "se_iid": errors["classical"],
            "se_HC1": errors["hc1"],
            "se_HC2": errors["hc2"],
            "se_HC3": errors["hc3"],
            "means": [intercept + ate, intercept],
            "adjusted": full.term("treat")["coefficient"],
            "adjusted_se_HC1": full.term("treat")["std_error"],
        },
    )


# Sources: R glm and lm, an own Newton dual for entropy balancing; numpy.
def test_training_observational() -> None:
    design, options = observational(), FitOptions()
    rows = observed(design, options)
    logit = fit_logit(rows.D, rows.X, rows.names)
    plain = ols(design, FitOptions(covariance="hc1")).term("treat")
    unfolded = doubly_robust(design, FitOptions(learner="parametric", folds=1)).term("treat")
    balanced = entropy_balancing(design, options)
    over_all, over_treated = weighting(design, options), weighting_treated(design, options)
    found = {f"ps.{n}": c for n, c in zip(rows.names, logit.coefficients, strict=True)}
    compare(
        "training_observational",
        {
            **found,
            "raw_difference": over_all.fit["raw_difference"],
            "ols_adjusted": plain["coefficient"],
            "ols_HC1": plain["std_error"],
            "ipw_att": over_treated.term("treat")["coefficient"],
            "ipw_ate_hajek": over_all.term("treat")["coefficient"],
            "aipw_ate": unfolded["coefficient"],
            "aipw_se_influence_function": unfolded["std_error"],
            "ebal_att": balanced.term("treat")["coefficient"],
            "ebal_ess": balanced.fit["effective_untreated"],
        },
    )
    assert any("out of balance" in note for note in over_all.notes)


# Sources: numpy, points redone in R glm and lm; the errors (Maddala 1983) have one source.
def test_training_chosen() -> None:
    design = chosen()
    column = treatment_two_step(design, FitOptions())
    labels = {"generalised_residual": "lambda"}
    found: dict[str, Any] = {"rho": column.fit["rho"], "sigma": column.fit["sigma"]}
    for name in column.names:
        term, label = column.term(name), labels.get(name, name)
        found[f"coef.{label}"], found[f"se.{label}"] = term["coefficient"], term["std_error"]
    compare("training_chosen", {**found, "ols_treat": column.fit["least_squares"]})


# Source: scipy's own optimiser on the likelihood written out, another start, no derivatives.
def test_treatment_likelihood_against_a_general_optimiser() -> None:
    design = without(deals(seed=4, candidates=360), "effects", "clusters")
    D = design.X[:, 1] == 1
    W = np.column_stack([np.delete(design.X, 1, axis=1), design.Z])
    q, scale = W.shape[1], float(design.y.std())
    y = design.y / scale

    def loss(theta: np.ndarray) -> float:
        rho, sigma = np.tanh(theta[-1]), np.exp(theta[-2])
        e = (y - design.X @ theta[q:-2]) / sigma
        index = (W @ theta[:q] + rho * e) / np.sqrt(1 - rho**2)
        value = stats.norm.logcdf(np.where(D, index, -index)) + stats.norm.logpdf(e)
        return float(-(value - np.log(sigma)).sum())

    start = np.zeros(q + design.X.shape[1] + 2)
    found = optimize.minimize(loss, start, method="BFGS", options={"gtol": 1e-5, "maxiter": 500})
    column = treatment_likelihood(design, FitOptions())
    shift = design.n * np.log(scale)
    assert column.fit["log_likelihood"] == pytest.approx(-found.fun - shift, abs=1e-5)
    np.testing.assert_allclose(column.coefficients, found.x[q:-2] * scale, rtol=1e-3, atol=1e-5)
    assert column.fit["rho"] == pytest.approx(np.tanh(found.x[-1]), abs=1e-3)
    # BFGS builds the inverse Hessian from its path: a few per cent is what it can tell.
    theirs = np.sqrt(np.diag(found.hess_inv))[q : q + 2] * scale
    np.testing.assert_allclose(column.std_errors[:2], theirs, rtol=0.15)


# Source: statsmodels probit for the fitted value, linearmodels IV2SLS for what follows.
def test_fitted_probability_against_libraries() -> None:
    design = without(deals(), "effects", "clusters")
    controls = np.delete(design.X, 1, axis=1)
    W = np.column_stack([controls, design.Z])
    p = sm.Probit(design.X[:, 1], W).fit(disp=0, tol=1e-12).predict()
    theirs = IV2SLS(design.y, controls, design.X[:, 1], p).fit(cov_type="robust", debiased=True)
    ours = fitted_probability_instrument(design, FitOptions(covariance="hc1")).term(
        "paid_in_shares"
    )
    assert ours["coefficient"] == pytest.approx(theirs.params["endog"], rel=1e-6)
    assert ours["std_error"] == pytest.approx(theirs.std_errors["endog"], rel=1e-6)


# Source: scikit-learn's neighbours, the averages by hand. Ties: real data, shares kept equal.
@pytest.mark.parametrize("m", [1, 4])
def test_matches_against_scikit_learn(m: int) -> None:
    design = without(deals(), "effects", "clusters")
    X = np.delete(design.X, [0, 1], axis=1)
    D, y = design.X[:, 1] == 1, design.y
    metric = {"VI": np.linalg.inv(np.cov(X, rowvar=False))}

    def stand_in(asking: np.ndarray, asked: np.ndarray) -> np.ndarray:
        near = NearestNeighbors(n_neighbors=m, metric="mahalanobis", metric_params=metric)
        return np.asarray(y[asked][near.fit(X[asked]).kneighbors(X[asking])[1]].mean(axis=1))

    on_treated = y[D] - stand_in(D, ~D)
    on_others = stand_in(~D, D) - y[~D]
    att = matching_treated(design, FitOptions(matches=m))
    ate = matching(design, FitOptions(matches=m))
    assert att.fit["uncorrected"] == pytest.approx(on_treated.mean(), rel=1e-9)
    both = np.concatenate([on_treated, on_others]).mean()
    assert ate.fit["uncorrected"] == pytest.approx(both, rel=1e-9)


# Source: by hand, worked through in the comments of the case.
def test_trimming_by_hand() -> None:
    D = np.repeat([True, False], 10)
    seen = np.r_[np.arange(10) < 8, np.arange(10) < 6]
    y = np.r_[np.arange(1, 11), np.arange(2, 12)].astype(float)
    found = bounds_of(y, D, seen)
    # An even grid of the unit interval: its trimmed means are those of the uniform distribution.
    m = 40_000
    grid = (np.arange(m) + 0.5) / m
    arm = np.repeat([True, False], m * 5 // 4)
    watched = np.zeros(len(arm), dtype=bool)
    outcome = np.full(len(arm), 0.5)
    watched[:m] = True
    outcome[:m] = grid
    watched[len(arm) // 2 : len(arm) // 2 + m * 3 // 4] = True
    uniform = bounds_of(outcome, arm, watched)
    assert uniform.trimmed == pytest.approx(0.25, abs=1e-12)
    compare(
        "trimming_by_hand",
        {
            "i.lower": found.lower,
            "i.upper": found.upper,
            "ii.lower": uniform.lower,
            "ii.upper": uniform.upper,
        },
    )


# Source: closed form of the truncated normal. A sample of a million lies within .01.
def test_trimming_normal() -> None:
    rng = np.random.default_rng(7)
    n = 1_000_000
    D = np.arange(n) % 2 == 0
    seen = rng.random(n) < np.where(D, 0.8, 0.6)
    y = rng.normal(size=n) + np.where(D, 0.5, 0.2)
    found = bounds_of(y, D, seen)
    expected = {key: entry["value"] for key, entry in CASES["trimming_normal"]["expected"].items()}
    assert found.trimmed == pytest.approx(expected["trim"], abs=0.01)
    assert found.lower == pytest.approx(expected["lower"], abs=0.01)
    assert found.upper == pytest.approx(expected["upper"], abs=0.01)
