"""A published table of takeover bids as a study of its own, against statsmodels and its source.

Data: the 126 tender offers of Jaggia and Thosar (1993, Review of Quantitative Finance and
Accounting 3, 447-457), carried as ``Bids`` of the package Ecdat. The premium is the bid price over
the price 14 working days before. Mean and standard deviation of the premium and mean of the white
knight indicator: Cameron and Trivedi (1998), Regression Analysis of Count Data, sec. 5.2.5, table
of summary statistics, cited from memory.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm

from pipeline.core.estimate import Estimate
from pipeline.core.results import Results
from pipeline.flow import run
from pipeline.study.load import load_study
from tests.reference.public_data import frame
from tests.study.studies import write

PUBLISHED = {"deals": 126, "mean": 1.347, "std_dev": 0.189, "white_knights": 0.595}
CONTROLS = ["insthold", "size", "leglrest", "regulatn"]
STUDY = f"""
title = "White knights"
question = "Do bids that a friendly third party joined carry another premium?"

[inputs]
deals = "bids.csv"

[inputs.columns.deals]
deal_id = "docno"

[outcome]
column = "bidprem"
unit = "price ratio"
label = "bid premium"

[regression]
treatment = "whtknght"
controls = {CONTROLS}
columns = ["ols", "median"]

[scrutiny]
run = false
"""


@pytest.fixture(scope="module")
def table() -> pd.DataFrame:
    return frame("Ecdat", "Bids")


@pytest.fixture(scope="module")
def results(table: pd.DataFrame, tmp_path_factory: pytest.TempPathFactory) -> Results:
    folder = tmp_path_factory.mktemp("bids")
    table.to_csv(folder / "bids.csv", index=False)
    return run(load_study(write(folder / "study.toml", STUDY)))[0]


def column(results: Results, estimator: str) -> Estimate:
    (found,) = [c for c in results.columns if c.estimator == estimator]
    assert isinstance(found, Estimate)
    return found


def test_summary_agrees_with_the_published_one(results: Results) -> None:
    row = results.summary.iloc[0]
    assert row["n"] == PUBLISHED["deals"]
    assert 1 + row["mean"] == pytest.approx(PUBLISHED["mean"], abs=5e-4)
    assert row["std_dev"] == pytest.approx(PUBLISHED["std_dev"], abs=5e-4)
    assert results.deals["whtknght"].mean() == pytest.approx(PUBLISHED["white_knights"], abs=5e-4)


def test_least_squares_agrees_with_statsmodels(results: Results, table: pd.DataFrame) -> None:
    X = sm.add_constant(table[["whtknght", *CONTROLS]])
    fit = sm.OLS(table["bidprem"] - 1, X).fit(cov_type="HC3", use_t=True)
    ours = column(results, "ols")
    np.testing.assert_allclose(ours.coefficients, fit.params, rtol=1e-9)
    np.testing.assert_allclose(ours.std_errors, fit.bse, rtol=1e-9)
    np.testing.assert_allclose(ours.p_values, fit.pvalues, rtol=1e-7)
    np.testing.assert_allclose(ours.intervals, fit.conf_int(), rtol=1e-7)


def test_median_agrees_with_statsmodels(results: Results, table: pd.DataFrame) -> None:
    X = sm.add_constant(table[["whtknght", *CONTROLS]])
    fit = sm.QuantReg(table["bidprem"] - 1, X).fit(q=0.5, p_tol=1e-10, max_iter=10_000)
    ours = column(results, "median")
    mine = np.abs(table["bidprem"] - 1 - X @ ours.coefficients).sum()
    theirs = np.abs(table["bidprem"] - 1 - X @ fit.params).sum()
    assert mine <= theirs * (1 + 1e-9)
    np.testing.assert_allclose(ours.coefficients, fit.params, atol=2e-4)
