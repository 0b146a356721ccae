"""What the pictures of the identification hold, against refits by statsmodels.

Outside: statsmodels' least squares, logit and probit; the theorem of Frisch and Waugh (1933) and
Lovell (1963), by which the slope through residuals is the coefficient of the full regression.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import statsmodels.api as sm
from scipy import stats

from pipeline.core.design import Design, FitOptions
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.least_squares import fixed_effects, ols
from pipeline.estimators.selection import LAMBDA, heckman_two_step
from pipeline.estimators.weighting import weighting
from pipeline.scrutiny.fitted import fits_of, residuals
from pipeline.scrutiny.pictured import alike, binned, correction, first_stage, pictured
from tests.estimators.designs import deals, without

OPTIONS = FitOptions()
AT = 1


@pytest.fixture(scope="module")
def design() -> Design:
    return deals()


def dummies(design: Design) -> np.ndarray:
    parts = [np.eye(int(codes.max()) + 1)[codes] for codes in design.effects.values()]
    return np.column_stack([parts[0], *(part[:, 1:] for part in parts[1:])])


def full_rank(design: Design) -> np.ndarray:
    """The controls and the effects' indicators, without the constant they hold."""
    return np.column_stack([np.delete(design.X, [0, AT], axis=1), dummies(design)])


def test_each_slope_is_the_first_stages_coefficient(design: Design) -> None:
    found = first_stage(design, OPTIONS)
    fitted = sm.OLS(design.X[:, AT], np.column_stack([design.Z, full_rank(design)])).fit()
    for at, name in enumerate(design.instruments):
        rows = [row for row in found["first_stage_bins"] if row["instrument"] == name]
        assert rows[0]["slope"] == pytest.approx(fitted.params[at], rel=1e-9)
        deals_in = np.array([float(str(row["deals"])) for row in rows])
        for column in ("instrument_mean", "treatment_mean"):
            # Residuals sum to zero, so do their means weighted by how many they are of.
            values = np.array([float(str(row[column])) for row in rows])
            assert deals_in @ values == pytest.approx(0, abs=1e-8)
        assert deals_in.sum() == design.n


def test_bins_hold_every_deal_in_order_and_keep_equal_ones_together() -> None:
    x = np.array([0.0] * 30 + list(np.linspace(1, 2, 70)))
    found = binned(x, 2 * x)
    assert sum(deals for *_, deals in found) == 100
    means = [mean for mean, *_ in found]
    assert means == sorted(means)
    assert found[0][2] >= 30
    assert all(y == pytest.approx(2 * mean) for mean, y, _ in found)


def test_probabilities_are_those_of_a_logit_and_weights_balance(design: Design) -> None:
    found = alike(design, OPTIONS)
    treated = design.X[:, AT]
    fitted = sm.Logit(treated, np.delete(design.X, AT, axis=1)).fit(disp=0, tol=1e-12)
    ours = np.array([float(str(row["probability"])) for row in found["propensity"]])
    np.testing.assert_allclose(ours, fitted.predict(), rtol=1e-6)
    column = weighting(design, OPTIONS)
    for row in found["balance"]:
        for when in ("before", "after"):
            assert row[when] == pytest.approx(column.fit[f"{when}.{row['variable']}"])
    facts = {(row["picture"], row["name"]): row["value"] for row in found["picture_facts"]}
    largest = max(abs(float(str(row["before"]))) for row in found["balance"])
    assert facts["balance", "before_largest"] == largest


def test_the_correction_is_the_ratio_of_a_probit_and_its_best_line(design: Design) -> None:
    found = correction(design, OPTIONS)
    selection = design.selection
    assert selection is not None
    probit = sm.Probit(selection.selected.astype(float), selection.W).fit(disp=0)
    index = selection.W @ probit.params
    ratio = stats.norm.pdf(index) / stats.norm.cdf(index)
    expected = np.empty(design.n)
    expected[selection.outcome_row[selection.selected]] = ratio[selection.selected]
    ours = np.array([float(str(row["mills"])) for row in found["mills"]])
    np.testing.assert_allclose(ours, expected, rtol=1e-5)
    line = sm.OLS(ours, design.X).fit()
    predicted = np.array([float(str(row["predicted"])) for row in found["mills"]])
    np.testing.assert_allclose(predicted, line.fittedvalues, rtol=1e-8)
    assert found["picture_facts"][0]["value"] == pytest.approx(line.rsquared)


def test_a_picture_without_meaning_has_no_rows(design: Design) -> None:
    bare = replace(without(design, "selection"), Z=np.empty((0, 0)), instruments=())
    assert {"first_stage_bins", "mills"}.isdisjoint(pictured(bare, OPTIONS))
    several = replace(bare, X=design.X * np.where(np.arange(5) == AT, 2.5, 1.0))
    assert "propensity" not in pictured(several, OPTIONS)


def test_what_least_squares_and_effects_leave_is_what_a_refit_leaves(design: Design) -> None:
    kept, left = residuals(design, ols(design, OPTIONS), {}) or (None, None)
    np.testing.assert_allclose(left, sm.OLS(design.y, design.X).fit().resid, atol=1e-12)
    assert kept is not None
    assert kept.all()
    within = residuals(design, fixed_effects(design, OPTIONS), {})
    assert within is not None
    whole = np.column_stack([design.X[:, AT], full_rank(design)])
    np.testing.assert_allclose(within[1], sm.OLS(design.y, whole).fit().resid, atol=1e-9)


def test_instruments_leave_the_outcomes_own_residual(design: Design) -> None:
    column = two_stage_least_squares(design, OPTIONS)
    found = residuals(design, column, {})
    assert found is not None
    effect = float(column.term(design.treatment)["coefficient"])
    rest = sm.OLS(design.y - effect * design.X[:, AT], full_rank(design)).fit()
    np.testing.assert_allclose(found[1], rest.resid, atol=1e-9)


def test_the_correction_counts_where_it_is_known(design: Design) -> None:
    column = heckman_two_step(design, OPTIONS)
    assert residuals(design, column, {}) is None
    mills = np.array([float(str(row["mills"])) for row in correction(design, OPTIONS)["mills"]])
    found = residuals(design, column, {LAMBDA: mills})
    assert found is not None
    whole = np.column_stack([design.X, mills])
    np.testing.assert_allclose(found[1], sm.OLS(design.y, whole).fit().resid, atol=1e-9)


def test_a_difference_of_means_predicts_no_deal(design: Design) -> None:
    columns = (ols(design, OPTIONS), weighting(design, OPTIONS))
    assert {row["deal"] for row in fits_of(design, columns, {}, {"deal 3"})} == {"deal 3"}
    rows = fits_of(design, columns, {}, set(design.rows))
    assert {row["column"] for row in rows} == {"Least squares"}
    assert len(rows) == design.n
    for row in rows[:5]:
        total = float(str(row["fitted"])) + float(str(row["residual"]))
        assert total == pytest.approx(row["observed"])
