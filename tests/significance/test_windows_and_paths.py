"""All windows together, their Holm adjustment, intervals, paths, variants and sample checks."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from scipy import stats
from statsmodels.stats.multitest import multipletests

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.estimate import NotApplicable, TestResult
from pipeline.core.ledger import Action, Ledger, LedgerEntry, StageLedger
from pipeline.core.window import Window
from pipeline.registry import TABLE, TESTS
from pipeline.significance.checks import sample_checks
from pipeline.significance.paths import average_paths
from pipeline.significance.power import detectable, z_test_power
from pipeline.significance.sample import car_sample
from pipeline.significance.variants import mean_variants
from pipeline.significance.windows import all_windows, holm_by_test, mean_interval
from tests.significance.samples import WINDOW, clustered, linked, sample_of

WINDOWS = (WINDOW, Window(0, 0), Window(0, 1), Window(-2, 2), Window(-5, 5))
TEST_FUNCTIONS = {item.key: item.load() for item in TABLE[TESTS]}


@pytest.fixture(scope="module")
def abnormal() -> AbnormalReturns:
    """Sixteen deals; two miss a day of the headline window, one of them several days."""
    found = clustered(gaps=0)
    returns = found.returns.copy()
    returns[3, 6] = np.nan
    returns[8, 4:9] = np.nan
    return replace(found, returns=returns)


def test_holm_goes_by_test_and_skips_those_without_a_p() -> None:
    def row(*p: float | None) -> dict[str, TestResult | NotApplicable]:
        made = [
            NotApplicable("t", "no") if value is None else TestResult("t", "", 1, "t", value)
            for value in p
        ]
        return dict(zip(("a", "b"), made, strict=True))

    found = holm_by_test([row(0.01, 0.04), row(0.04, None), row(0.03, 0.03)])
    known = multipletests([0.01, 0.04, 0.03], method="holm")[1]
    assert [item["a"] for item in found] == pytest.approx(list(known))
    assert [item.get("b") for item in found] == [pytest.approx(0.06), None, pytest.approx(0.06)]
    assert holm_by_test([]) == []


def test_every_window_and_model(abnormal: AbnormalReturns) -> None:
    models = {"market_model": abnormal, "again": replace(abnormal, model="again")}
    found = all_windows(models, WINDOWS, TEST_FUNCTIONS, {}, 0.6, 0.95)
    assert [(item.model, item.window) for item in found] == [
        (model, window) for model in models for window in WINDOWS
    ]
    lead = found[0]
    cars = abnormal.select(abnormal.complete(WINDOW)).car(WINDOW)
    assert lead.n == len(cars) == 14
    assert lead.mean == pytest.approx(cars.mean())
    assert lead.median == pytest.approx(np.median(cars))
    assert lead.std_dev == pytest.approx(cars.std(ddof=1))
    assert lead.share_positive == pytest.approx((cars > 0).mean())
    assert lead.p_holm == {}
    # The headline needs all its days. Another window may lack some, but never day 0.
    assert [item.n for item in found[1:5]] == [15, 14, 15, 15]


def test_secondary_windows_pay_for_their_number(abnormal: AbnormalReturns) -> None:
    found = all_windows({"m": abnormal}, WINDOWS, TEST_FUNCTIONS, {}, 0.8, 0.95)
    for key in ("cross_sectional", "patell", "standardised", "dependence_adjusted", "rank"):
        tests = [item.tests[key] for item in found[1:]]
        raw = [test.p_value for test in tests if isinstance(test, TestResult)]
        known = multipletests(raw, method="holm")[1]
        np.testing.assert_allclose([item.p_holm[key] for item in found[1:]], known, rtol=1e-12)
    assert all("single_event" not in item.p_holm for item in found)


def test_a_window_without_deals_has_no_number(abnormal: AbnormalReturns) -> None:
    silent = replace(abnormal, returns=np.full_like(abnormal.returns, np.nan))
    (found,) = all_windows({"m": silent}, WINDOWS[:1], TEST_FUNCTIONS, {}, 0.8, 0.95)
    assert found.n == 0
    assert np.isnan([found.mean, found.median, found.std_dev, *found.interval]).all()
    assert all(isinstance(test, NotApplicable) for test in found.tests.values())


@pytest.mark.parametrize("level", [0.9, 0.95])
def test_interval_of_the_mean(level: float) -> None:
    """scipy's t interval when deals are independent; wider by the adjustment when they are not."""
    cars = np.random.default_rng(2).normal(0.01, 0.03, 20)
    known = stats.t.interval(level, 19, cars.mean(), cars.std(ddof=1) / np.sqrt(20))
    found = mean_interval(sample_of(cars, np.full(20, 0.03)), level)
    assert found == pytest.approx(known, rel=1e-9)
    link = linked(0.2)
    wide = mean_interval(sample_of(cars, np.full(20, 0.03), link=link), level)
    ratio = (wide[1] - wide[0]) / (known[1] - known[0])
    assert ratio == pytest.approx(np.sqrt((1 + 19 * 0.2) / 0.8))
    one = mean_interval(sample_of(np.array([0.05]), np.array([0.02]), df=58), level)
    assert one == pytest.approx(stats.t.interval(level, 58, 0.05, 0.02), rel=1e-9)


def test_smallest_mean_found_four_times_in_five() -> None:
    """At that mean the two-sided z test has 80% power; 2.8 s/sqrt(n): Campbell et al. 1997."""
    alone, together = linked(0.0), linked(0.1)
    effect = detectable(0.05, 40, alone)
    assert z_test_power(effect, 0.05, 40) == pytest.approx(0.8, abs=1e-4)
    assert effect == pytest.approx(2.8 * 0.05 / np.sqrt(40), rel=0.001)
    worth = together.effective_n(40)
    assert detectable(0.05, 40, together) == pytest.approx(effect * np.sqrt(40 / worth))
    assert z_test_power(0.0, 0.05, 40, 0.1) == pytest.approx(0.1)


def test_average_paths(abnormal: AbnormalReturns) -> None:
    """Group means of cumulated returns with t bands, by pandas and scipy."""
    groups = pd.Series(["cash", "shares"] * 8)
    days = Window(-3, 5)
    found = average_paths(abnormal, groups, days, 0.9)
    wide = pd.DataFrame(abnormal.returns[:, 2:11], columns=range(-3, 6))
    cumulated = wide.cumsum(axis=1, skipna=False)
    for group in ("cash", "shares"):
        own = cumulated[(groups == group).to_numpy()]
        rows = found[found["group"] == group].set_index("day")
        assert rows.index.tolist() == list(range(-3, 6))
        for day in rows.index:
            values = own[day].dropna()
            low, high = stats.t.interval(0.9, len(values) - 1, values.mean(), values.sem())
            assert rows.loc[day, "n"] == len(values)
            got = rows.loc[day, ["mean", "low", "high"]].tolist()
            assert got == pytest.approx([values.mean(), low, high], rel=1e-9)
    # A deal leaves its group on the day its prices stop.
    assert found[found["group"] == "shares"].set_index("day")["n"].tolist() == [8] * 4 + [7] * 5


def test_the_path_of_a_single_deal_has_no_band(abnormal: AbnormalReturns) -> None:
    one = abnormal.take(np.array([0]))
    found = average_paths(one, pd.Series(["all deals"]), Window(0, 1), 0.95)
    assert found["n"].tolist() == [1, 1]
    assert found[["low", "high"]].isna().all(axis=None)
    np.testing.assert_allclose(found["mean"], np.cumsum(one.returns[0, 5:7]))


def flagged(*entries: tuple[str, str, Action]) -> Ledger:
    made = tuple(LedgerEntry(deal, rule, action, "", "") for deal, rule, action in entries)
    return Ledger((StageLedger("one", 40, made),))


def test_the_mean_without_flagged_deals(abnormal: AbnormalReturns) -> None:
    ledger = flagged(
        ("D000", "confounded", Action.FLAGGED),
        ("D001", "confounded", Action.FLAGGED),
        ("D002", "thin_trading", Action.DROPPED),
        ("D999", "time_unknown", Action.FLAGGED),
    )
    models = {"market_model": abnormal, "constant_mean": abnormal}
    found = mean_variants(models, WINDOW, ledger, 0.95)
    assert found["variant"].tolist() == [
        "market model", "constant mean", "without deals next to an earnings release",
    ]  # fmt: skip
    assert found["n"].tolist() == [14, 14, 12]
    without = abnormal.take(np.arange(2, 16))
    sample = car_sample(without, WINDOW, 1.0)
    assert found["estimate"].iloc[2] == pytest.approx(sample.car.mean())
    assert (found["ci_low"].iloc[2], found["ci_high"].iloc[2]) == pytest.approx(
        mean_interval(sample, 0.95)
    )


@pytest.fixture
def deals(abnormal: AbnormalReturns) -> pd.DataFrame:
    return pd.DataFrame(
        {
            "deal_id": abnormal.deals,
            "security": ["A", "A", *[f"S{at}" for at in range(14)]],
            "status": "completed",
        }
    )


def test_checks_of_the_sample(abnormal: AbnormalReturns, deals: pd.DataFrame) -> None:
    checks = {item.check: item for item in sample_checks(abnormal, WINDOW, deals)}
    sample = car_sample(abnormal, WINDOW, 1.0)
    link = sample.dependence
    together = checks["Mean correlation of abnormal returns"]
    assert (together.value, together.verdict) == (link.mean, "warn")
    overlapping = checks["Pairs of deals whose windows overlap, share"]
    assert (overlapping.value, overlapping.verdict) == (link.overlapping, "warn")
    skew = checks["Skewness of standardised returns"]
    assert skew.value == pytest.approx(stats.skew(sample.scar))
    repeats = checks["Deals of companies with several deals, share"]
    assert repeats.value == pytest.approx(2 / 16)
    completed = checks["Completed deals, share"]
    assert (completed.value, completed.verdict) == (1.0, "warn")
    worth = checks["Deals that independent ones would be worth"]
    assert worth.value == pytest.approx(link.effective_n(14))
    smallest = checks["Smallest mean found four times in five, decimal"]
    spread = float(sample.car.std(ddof=1))
    assert smallest.value == pytest.approx(detectable(spread, 14, link))
    assert all(item.subject == "Sample" and item.source for item in checks.values())


def test_checks_that_pass(deals: pd.DataFrame) -> None:
    apart = clustered(days=900, correlation=0.0, gaps=0, seed=3)
    mixed = deals.assign(status=["completed", "withdrawn"] * 8)
    verdicts = {item.check: item.verdict for item in sample_checks(apart, WINDOW, mixed)}
    assert verdicts["Mean correlation of abnormal returns"] == "pass"
    assert verdicts["Pairs of deals whose windows overlap, share"] == "pass"
    assert verdicts["Completed deals, share"] == "pass"
    unknown = sample_checks(apart, WINDOW, deals.assign(status=""))
    assert all(item.check != "Completed deals, share" for item in unknown)
    assert sample_checks(apart.take(np.array([0])), WINDOW, deals[:1]) == ()
