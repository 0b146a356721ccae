"""Several windows at once: the statistic, the draws they share, and what is adjusted."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from statsmodels.stats.multitest import multipletests

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.window import Window
from pipeline.report.several_windows import several_windows_table
from pipeline.significance.resampled import _cluster_t
from pipeline.significance.several_windows import several_windows, window_family
from tests.report.runs import full_run
from tests.significance.samples import WINDOW, clustered

WINDOWS = (WINDOW, Window(0, 0), Window(0, 1), Window(-2, 2), Window(-5, 5))
SEED = 11


@pytest.fixture(scope="module")
def abnormal() -> AbnormalReturns:
    """Forty deals on about thirty dates, one of them with a day missing."""
    found = clustered(deals=40, days=45, gaps=0)
    returns = found.returns + 0.004
    returns[3, 8] = np.nan
    return replace(found, returns=returns)


def test_the_statistic_is_a_clustered_regression_on_a_constant(abnormal: AbnormalReturns) -> None:
    """statsmodels, errors clustered by date; its factor (n - 1)/(n - k) is one without slopes."""
    found = window_family(abnormal, WINDOWS, 0.8, SEED, 9)
    for at, window in enumerate(WINDOWS):
        keep = abnormal.complete(window, 0.8 if at else 1.0)
        dates = abnormal.days[keep, 5].astype("int64")
        fitted = sm.OLS(abnormal.car(window)[keep], np.ones(keep.sum())).fit(
            cov_type="cluster", cov_kwds={"groups": dates}
        )
        assert found.statistic[at] == pytest.approx(fitted.tvalues[0], rel=1e-10)
        assert found.n[at] == keep.sum()
        assert found.dates[at] == len(set(dates))


def test_draws_are_resamples_of_dates_about_the_samples_own_mean(
    abnormal: AbnormalReturns,
) -> None:
    """The same dates by the plain formula, one window at a time."""
    found = window_family(abnormal, WINDOWS, 0.8, SEED, 50)
    dates, codes = np.unique(abnormal.days[:, 5], return_inverse=True)
    drawn = np.random.default_rng(SEED).integers(0, len(dates), (50, len(dates)))
    for at, window in enumerate(WINDOWS):
        keep = abnormal.complete(window, 0.8 if at else 1.0)
        total = np.bincount(codes[keep], abnormal.car(window)[keep], len(dates))
        size = np.bincount(codes[keep], minlength=len(dates)).astype(float)
        if not size.all():
            continue
        plain = _cluster_t(total[drawn], size[drawn], float(found.mean[at]))
        np.testing.assert_allclose(found.resampled[:, at], plain, rtol=1e-8)


def test_secondary_windows_pay_and_the_headline_does_not(abnormal: AbnormalReturns) -> None:
    found = several_windows({"m": abnormal}, WINDOWS, 0.8, SEED)
    assert found["declared"].tolist() == ["headline", *["secondary"] * 4]
    paid = ["p_holm", "q_value", "p_romano_wolf"]
    assert found.loc[0, paid].isna().all()
    later = found.iloc[1:]
    raw = later["p_value"].to_numpy()
    np.testing.assert_allclose(later["p_holm"], multipletests(raw, method="holm")[1], rtol=1e-12)
    known = multipletests(raw, method="fdr_bh")[1]
    np.testing.assert_allclose(later["q_value"], known, rtol=1e-12)
    assert (later["p_romano_wolf"] >= later["p_value"]).all()
    assert (later["p_romano_wolf"] <= later["p_holm"] + 0.02).all()
    assert (found["draws"] == 1999).all()


def test_windows_that_are_alike_cost_less_than_holm_says(abnormal: AbnormalReturns) -> None:
    """The same window five times under two names of days is one question."""
    quiet = abnormal.returns.copy()
    quiet[:, 6:] = np.where(np.isnan(quiet[:, 6:]), np.nan, 0.0)
    copies = (Window(-1, 0), *(Window(0, day) for day in range(5)))
    found = several_windows({"m": replace(abnormal, returns=quiet)}, copies, 0.1, SEED).iloc[1:]
    assert found["p_romano_wolf"].to_numpy() == pytest.approx(found["p_value"].to_numpy())
    assert (found["p_holm"] > found["p_romano_wolf"]).all()


def test_the_same_seed_gives_the_same_numbers(abnormal: AbnormalReturns) -> None:
    one, other = (several_windows({"m": abnormal}, WINDOWS, 0.8, SEED) for _ in range(2))
    pd.testing.assert_frame_equal(one, other)
    third = several_windows({"m": abnormal}, WINDOWS, 0.8, SEED + 1)
    assert not third["p_value"].equals(one["p_value"])


def test_too_few_dates_have_a_mean_and_no_p(abnormal: AbnormalReturns) -> None:
    few = abnormal.take(np.arange(5))
    found = several_windows({"m": few}, WINDOWS, 0.8, SEED)
    assert found["mean"].notna().all()
    assert found[["statistic", "p_value", "p_holm", "p_romano_wolf"]].isna().all(axis=None)


def test_the_page_shows_each_window_with_its_adjusted_values(abnormal: AbnormalReturns) -> None:
    from pipeline.report.material import Material

    run = full_run()
    assert several_windows_table(Material.of(run)) is None
    frame = several_windows({run.study.models[0]: abnormal}, WINDOWS, 0.8, SEED)
    table = several_windows_table(Material.of(replace(run, several_windows=frame)))
    assert table is not None
    assert len(table.rows) == len(WINDOWS)
    headings = " ".join(column.heading for column in table.columns)
    assert all(name in headings for name in ("Holm", "Benjamini–Hochberg", "Romano–Wolf"))
    assert [cell is None for cell in table.rows[0][-3:]] == [True] * 3
    assert all(cell is not None for row in table.rows[1:] for cell in row)
