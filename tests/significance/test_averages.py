"""Other averages, groups and the band of a whole path, against scipy and by simulation."""

from __future__ import annotations

import numpy as np
import pytest
import statsmodels.api as sm
from scipy import stats

from pipeline.significance.averages import averages, group_tests
from pipeline.significance.paths import simultaneous_reach

STREAM = np.random.default_rng(11)
CAR = STREAM.normal(0.004, 0.03, 60)
VARIANCE = STREAM.uniform(0.0004, 0.0016, 60)
VALUE = STREAM.lognormal(6, 1, 60)
HELD = CAR + STREAM.normal(0, 0.002, 60)


def test_weighted_means_are_weighted_least_squares_with_robust_errors() -> None:
    """statsmodels WLS of the CARs on a constant, HC1 errors."""
    frame = averages(CAR, VARIANCE, VALUE, HELD, 0.95).set_index("average")
    for name, weight in (
        ("equal weights", np.ones(60)),
        ("by precision", 1 / VARIANCE),
        ("by market value", VALUE),
    ):
        known = sm.WLS(CAR, np.ones(60), weights=weight).fit(cov_type="HC1", use_t=True)
        assert frame.loc[name, "value"] == pytest.approx(known.params[0], rel=1e-10)
        assert frame.loc[name, "std_error"] == pytest.approx(known.bse[0], rel=1e-10)
        low, high = known.conf_int(0.05)[0]
        assert frame.loc[name, ["ci_low", "ci_high"]].tolist() == pytest.approx([low, high])


def test_trimmed_mean_and_median_against_scipy() -> None:
    frame = averages(CAR, VARIANCE, VALUE, HELD, 0.95).set_index("average")
    assert frame.loc["trimmed", "value"] == pytest.approx(stats.trim_mean(CAR, 0.1))
    assert frame.loc["median", "value"] == np.median(CAR)
    known = stats.mstats.trimmed_stde(CAR, limits=(0.1, 0.1), inclusive=(True, True))
    held = stats.ttest_1samp(HELD, 0.0).confidence_interval(0.95)
    assert frame.loc["buy and hold", "value"] == pytest.approx(HELD.mean())
    assert frame.loc["buy and hold", ["ci_low", "ci_high"]].tolist() == pytest.approx([*held])
    assert frame.loc["trimmed", "std_error"] == pytest.approx(float(known), rel=0.02)


@pytest.mark.parametrize("n", [6, 25, 60])
def test_the_medians_interval_covers(n: int) -> None:
    """At least 95% whatever the distribution; here exponential, whose median is log 2."""
    stream = np.random.default_rng(n)
    hits = 0
    for _ in range(400):
        car = stream.exponential(1.0, n)
        frame = averages(car, np.ones(n), np.full(n, np.nan), car, 0.95)
        row = frame.set_index("average").loc["median"]
        hits += row["ci_low"] <= np.log(2) <= row["ci_high"]
    assert hits / 400 >= 0.95 - 3 * np.sqrt(0.05 * 0.95 / 400)


def test_two_deals_give_no_averages_and_unknown_values_no_money() -> None:
    assert averages(CAR[:2], VARIANCE[:2], VALUE[:2], HELD[:2], 0.95).empty
    frame = averages(CAR, VARIANCE, np.full(60, np.nan), HELD, 0.95)
    assert "by market value" not in set(frame["average"])


def test_groups_against_scipy() -> None:
    treated = (np.arange(60) % 3 == 0).astype(float)
    scar = CAR / np.sqrt(VARIANCE)
    frame = group_tests(CAR, scar, treated, ("cash", "shares"))
    known = stats.ttest_ind(CAR[treated == 1], CAR[treated == 0], equal_var=False)
    assert frame["p_value"].iloc[0] == pytest.approx(known.pvalue)
    assert frame["difference"].iloc[0] == pytest.approx(
        CAR[treated == 1].mean() - CAR[treated == 0].mean()
    )
    ranks = stats.mannwhitneyu(CAR[treated == 1], CAR[treated == 0], method="asymptotic")
    assert frame["p_value"].iloc[2] == pytest.approx(ranks.pvalue)
    above = stats.median_test(CAR[treated == 1], CAR[treated == 0])
    assert frame["p_value"].iloc[3] == pytest.approx(above.pvalue)
    assert frame["difference"].iloc[3] == pytest.approx(
        np.median(CAR[treated == 1]) - np.median(CAR[treated == 0])
    )
    assert frame[["n_first", "n_second"]].iloc[0].tolist() == [40, 20]
    assert group_tests(CAR, scar, np.zeros(60), ("cash", "shares")).empty
    assert group_tests(CAR, scar, np.linspace(0, 1, 60), ("cash", "shares")).empty


def test_the_median_test_by_its_table() -> None:
    """Chi-squared of the two by two table of deals above the common median, Yates' correction;
    left out when no deal lies above it. Mood 1950."""
    treated = (np.arange(60) % 3 == 0).astype(float)
    row = group_tests(CAR, CAR, treated, ("cash", "shares")).set_index("test").loc["Median test"]
    high = np.median(CAR) < CAR
    table = [[(high & (treated == g)).sum(), (~high & (treated == g)).sum()] for g in (1, 0)]
    known = stats.chi2_contingency(table)
    assert (row["statistic"], row["df"]) == (pytest.approx(known.statistic), 1.0)
    assert row["p_value"] == pytest.approx(known.pvalue)
    tied = np.where(np.arange(60) < 40, 0.02, CAR - 1)
    assert "Median test" not in set(group_tests(tied, CAR, treated, ("cash", "shares"))["test"])


def test_the_band_of_a_path_holds_the_whole_path() -> None:
    """Coverage of a true path of zero by 60 deals' random walks of 12 days, 300 draws."""
    stream = np.random.default_rng(3)
    whole, alone = 0, 0
    for at in range(300):
        own = np.cumsum(stream.normal(0, 0.02, (60, 12)), axis=1)
        mean, error = own.mean(axis=0), own.std(axis=0, ddof=1) / np.sqrt(60)
        reach = simultaneous_reach(own, mean, error, 0.95, at)
        whole += bool((np.abs(mean) <= reach * error).all())
        alone += bool((np.abs(mean) <= 2.0 * error).all())
        assert reach > 2.0
    assert whole / 300 >= 0.95 - 3 * np.sqrt(0.05 * 0.95 / 300)
    assert alone < whole
