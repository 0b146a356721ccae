"""Abnormal returns, their tests and power against numbers computed or printed elsewhere.

The numbers and their sources are in ``events.json``; prices come from packages of the registry.
"""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.estimate import NotApplicable, Tested, TestResult
from pipeline.core.prices import PricePanel
from pipeline.core.window import Window
from pipeline.registry import EXPECTED_RETURNS, TESTS, entry
from pipeline.returns.measure import measure
from pipeline.significance.power import z_test_power
from pipeline.significance.ranks import signed_rank
from pipeline.significance.sample import car_sample
from tests.benchmarks.event_tests_size import KEYS, REAL, drawn, drawn_rates
from tests.returns.panels import fitted, panel_of_closes, panel_of_returns, weekdays
from tests.significance.samples import sample_of

CASES: dict[str, Any] = json.loads(Path(__file__).with_name("events.json").read_text())["cases"]
THIRTEEN = CASES["thirteen_events"]["expected"]
ESTIMATION, SPAN = Window(-250, -11), Window(-5, 5)
WINDOWS = {"CAR[0,0]": (0, 0), "CAR[-1,1]": (-1, 1), "CAR[-2,2]": (-2, 2), "CAR[-5,5]": (-5, 5)}


def close_to(case: dict[str, Any], found: object) -> None:
    """Within the tolerance that the case states, element by element."""
    np.testing.assert_allclose(
        np.asarray(found, dtype=float),
        np.asarray(case["value"], dtype=float),
        rtol=case.get("rel_tol", 0.0),
        atol=case.get("abs_tol", 0.0),
    )


def result(test: Tested) -> TestResult:
    assert not isinstance(test, NotApplicable), test
    return test


@pytest.fixture(scope="module")
def prices() -> PricePanel:
    """Twenty shares and their index, 1990 to 2022, as skfolio carries them."""
    datasets = pytest.importorskip("skfolio.datasets", reason="test extra not installed")
    shares, index = datasets.load_sp500_dataset(), datasets.load_sp500_index()
    days = shares.index.to_numpy().astype("datetime64[D]")
    level = index.iloc[:, 0].to_numpy(float)
    return panel_of_closes(days, list(shares.columns), shares.to_numpy(float), level)


@pytest.fixture(scope="module")
def thirteen(prices: PricePanel) -> dict[str, AbnormalReturns]:
    """The thirteen events under each model, through the whole measuring step."""
    names = [key.split("_") for key in THIRTEEN]
    located = pd.DataFrame(
        {
            "deal_id": list(THIRTEEN),
            "exchange": "XNYS",
            "column": [prices.column(code) for code, _ in names],
            "position": [prices.position(np.datetime64(day)) for _, day in names],
        }
    )
    masked = np.zeros((len(located), len(ESTIMATION)), dtype=np.bool_)
    return {
        key: measure(
            key,
            entry(EXPECTED_RETURNS, key).load(),
            located,
            masked,
            {"XNYS": prices},
            ESTIMATION,
            SPAN,
        )
        for key in ("market_model", "market_adjusted", "constant_mean")
    }


@pytest.mark.parametrize("key", THIRTEEN)
def test_thirteen_events_fit(key: str, thirteen: dict[str, AbnormalReturns]) -> None:
    """statsmodels 0.15 least squares; R's lm agrees to 2e-15 (events.json)."""
    case, row = THIRTEEN[key]["value"], list(THIRTEEN).index(key)
    lead, mean = thirteen["market_model"], thirteen["constant_mean"]
    assert lead.deals[row] == key
    assert str(lead.estimation_days[row, 0]) == case["est_first"]
    assert str(lead.estimation_days[row, -1]) == case["est_last"]
    assert lead.observations[row] == case["n_est"]
    sigma = np.sqrt(lead.residual_variance[row])
    errors = sigma * np.sqrt(np.diag(lead.bread[row]))
    total = np.sum((mean.estimation_returns[row]) ** 2)
    found = {
        "alpha": lead.parameters[row, 0],
        "beta": lead.parameters[row, 1],
        "sigma": sigma,
        "se_alpha": errors[0],
        "se_beta": errors[1],
        "r2": 1 - np.sum(lead.estimation_returns[row] ** 2) / total,
        "mean_est": mean.parameters[row, 0],
        "AR_m5_p5": lead.returns[row],
        "ret_m5_p5": lead.returns[row] + lead.expected[row],
        "mkt_m5_p5": thirteen["market_adjusted"].expected[row],
        "frac_pos_est": np.mean(lead.estimation_returns[row] > 0),
    }
    for name, value in found.items():
        close_to({"value": case[name], "abs_tol": THIRTEEN[key]["abs_tol"]}, value)
    pooled = np.append(lead.estimation_returns[row], lead.returns[row, 5])
    assert stats.rankdata(pooled)[-1] == case["rank_day0"]


@pytest.mark.parametrize("label", WINDOWS)
@pytest.mark.parametrize("key", THIRTEEN)
def test_thirteen_events_windows(
    key: str, label: str, thirteen: dict[str, AbnormalReturns]
) -> None:
    """CAR, its forecast standard deviation, SCAR, BHAR and the models without a fit."""
    case, row = THIRTEEN[key]["value"][label], list(THIRTEEN).index(key)
    window = Window(*WINDOWS[label])
    lead, adjusted = thirteen["market_model"], thirteen["market_adjusted"]
    found = {
        "CAR": lead.car(window),
        "sd": np.sqrt(lead.car_variance(window)),
        "SCAR": lead.standardised(window),
        "sd_simple": np.sqrt(lead.residual_variance * len(window)),
        "BHAR": lead.bhar(window),
        "BHAR_mkt": adjusted.bhar(window),
        "BHAR_mkt, log": in_logs(adjusted).bhar(window, log=True),
        "CAR_mktadj": adjusted.car(window),
        "CAR_meanadj": thirteen["constant_mean"].car(window),
    }
    for name, values in found.items():
        close_to({"value": case[name.removesuffix(", log")], "abs_tol": 1e-10}, values[row])


def in_logs(found: AbnormalReturns) -> AbnormalReturns:
    """The same moves of shares and market, written as logarithmic returns."""
    realised, expected = np.log1p(found.returns + found.expected), np.log1p(found.expected)
    return replace(found, returns=realised - expected, expected=expected)


def test_thirteen_events_tests(thirteen: dict[str, AbnormalReturns]) -> None:
    """Cross-sectional t, Patell Z and standardised t of day 0 (events.json, independent numpy)."""
    case = CASES["thirteen_events_tests"]["expected"]
    sample = car_sample(thirteen["market_model"], Window(0, 0), 1.0)
    found = {key: result(entry(TESTS, key).load()(sample)) for key in ("cross_sectional", "patell")}
    standardised = result(entry(TESTS, "standardised").load()(sample))
    assert sample.n == case["N"]["value"]
    close_to(case["AAR"], sample.car.mean())
    close_to(case["t_cross"], found["cross_sectional"].statistic)
    close_to(case["p_cross_tN1"], found["cross_sectional"].p_value)
    close_to(case["patell_Z"], found["patell"].statistic)
    close_to(case["bmp_t"], standardised.statistic)
    close_to(case["p_bmp_tN1"], standardised.p_value)


def test_thirteen_events_rank_sign_and_portfolio(thirteen: dict[str, AbnormalReturns]) -> None:
    """Rank, generalised sign and portfolio t of day 0 (events.json, independent numpy)."""
    case = CASES["thirteen_events_tests"]["expected"]
    sample = car_sample(thirteen["market_model"], Window(0, 0), 1.0)
    close_to(case["corrado_t"], result(entry(TESTS, "rank").load()(sample)).statistic)
    close_to(case["crude_dep_t"], result(entry(TESTS, "time_series").load()(sample)).statistic)
    sign = result(entry(TESTS, "generalised_sign").load()(sample))
    close_to(case["gsign_Z"], sign.statistic)
    close_to(case["phat"], sign.facts["share_before"])
    close_to(case["n_pos"], sign.facts["above_zero"])


def test_five_returns_by_hand() -> None:
    """Five returns worked out on paper; the forecast variance is s² (1 + 1/5 + .01²/.001)."""
    case = CASES["five_returns_by_hand"]["expected"]
    market = np.array([-0.02, -0.01, 0.0, 0.01, 0.02, 0.01])
    share = np.array([-0.03, 0.0, 0.01, 0.02, 0.05, 0.05])
    panel = panel_of_returns(weekdays(6), share[:, None], market)
    day = Window(0, 0)
    found = fitted("market_model", panel, [0], [5], Window(-5, -1), day)
    close_to(case["alpha"], found.parameters[0, 0])
    close_to(case["beta"], found.parameters[0, 1])
    close_to(case["sigma"], np.sqrt(found.residual_variance[0]))
    close_to(case["AR"], found.returns[0, 0])
    close_to(case["sd_pred"], np.sqrt(found.car_variance(day)[0]))
    close_to(case["t"], found.standardised(day)[0])
    by_hand = (1 + 1 / 5 + 0.01**2 / 0.001) * found.residual_variance[0]
    np.testing.assert_allclose(found.car_variance(day), by_hand, rtol=1e-12)


@pytest.fixture(scope="module")
def textbook() -> dict[str, AbnormalReturns]:
    """The textbook's 84 returns, estimated over May to July, measured on every day."""
    data = pytest.importorskip("causaldata", reason="test extra not installed")
    table = data.google_stock.load_pandas().data
    days = pd.to_datetime(table["Date"]).to_numpy().astype("datetime64[D]")
    share = table["Google_Return"].to_numpy(float)[:, None]
    panel = panel_of_returns(days, share, table["SP500_Return"].to_numpy(float))
    zero = panel.position(np.datetime64("2015-08-10"))
    first = panel.position(np.datetime64("2015-05-01"))
    last = int(np.flatnonzero(days <= np.datetime64("2015-07-31"))[-1])
    estimation, span = Window(first - zero, last - zero), Window(-zero, len(days) - 1 - zero)
    return {
        key: fitted(key, panel, [0], [zero], estimation, span)
        for key in ("market_model", "market_adjusted", "constant_mean")
    }


def test_textbook_estimation(textbook: dict[str, AbnormalReturns]) -> None:
    case = CASES["textbook_reorganisation"]["expected"]
    lead = textbook["market_model"]
    assert lead.observations[0] == case["n_est"]["value"]
    close_to(case["alpha"], lead.parameters[0, 0])
    close_to(case["beta"], lead.parameters[0, 1])
    close_to(case["sigma"], np.sqrt(lead.residual_variance[0]))
    close_to(case["mean_est"], textbook["constant_mean"].parameters[0, 0])
    close_to(case["sd_AR_risk_all_84_days"], lead.returns[0].std(ddof=1))


def test_textbook_abnormal_returns(textbook: dict[str, AbnormalReturns]) -> None:
    case = CASES["textbook_reorganisation"]["expected"]
    columns = {
        "AR_risk": "market_model",
        "AR_market": "market_adjusted",
        "AR_mean": "constant_mean",
    }
    dated = [key for key in case if key.startswith("2015-")]
    assert len(dated) == case["n_obs"]["value"]
    for day in dated:
        for name, model in columns.items():
            at = list(textbook[model].days[0].astype(str)).index(day)
            wanted = {"value": case[day]["value"][name], "abs_tol": case[day]["abs_tol"]}
            close_to(wanted, textbook[model].returns[0, at])


@pytest.mark.parametrize(("key", "end"), [("CAR_0_1", 1), ("CAR_0_2", 2), ("CAR_0_4", 4)])
def test_textbook_windows(key: str, end: int, textbook: dict[str, AbnormalReturns]) -> None:
    case, lead = CASES["textbook_reorganisation"]["expected"], textbook["market_model"]
    window, tolerance = Window(0, end), {"rel_tol": case[key]["rel_tol"]}
    close_to({"value": case[key]["value"]["CAR"], **tolerance}, lead.car(window)[0])
    sd = np.sqrt(lead.car_variance(window)[0])
    close_to({"value": case[key]["value"]["sd"], **tolerance}, sd)
    close_to({"value": case[key]["value"]["t"], **tolerance}, lead.standardised(window)[0])
    day = case["event_day"]["value"]
    single = result(entry(TESTS, "single_event").load()(car_sample(lead, Window(0, 0), 1.0)))
    close_to({"value": day["t"], "rel_tol": 1e-8}, single.statistic)
    assert single.p_value == pytest.approx(2 * stats.t.sf(abs(day["t"]), 61), rel=1e-8)


@pytest.mark.parametrize("name", ["power_sd_two_percent", "power_sd_four_percent"])
def test_power_of_the_z_test(name: str) -> None:
    """Closed form; to two decimals table 2 of MacKinlay 1997 (value from memory, events.json)."""
    for key, case in CASES[name]["expected"].items():
        std_dev, n = (float(part) for part in key.removeprefix("sd").split("_N"))
        effects = {float(effect): value for effect, value in case["value"].items()}
        found = [z_test_power(effect, std_dev, n) for effect in effects]
        close_to({**case, "value": list(effects.values())}, found)


@pytest.mark.parametrize(
    ("effect", "std_dev", "n", "printed"),
    [
        (0.005, 0.02, 1, 0.06),
        (0.01, 0.02, 1, 0.08),
        (0.015, 0.02, 1, 0.12),
        (0.02, 0.02, 1, 0.17),
        (0.01, 0.02, 20, 0.61),
        (0.005, 0.02, 50, 0.42),
        (0.01, 0.04, 60, 0.49),
        (0.005, 0.04, 100, 0.24),
    ],
)
def test_power_to_two_decimals(effect: float, std_dev: float, n: int, printed: float) -> None:
    """MacKinlay 1997, JEL 35, table 2; values from memory (events.json)."""
    assert round(z_test_power(effect, std_dev, n), 2) == printed


def signed_rank_cases() -> dict[str, np.ndarray]:
    """Few and many returns, with and without ties and zeros; rounded to a percent they tie."""
    stream = np.random.default_rng(12)
    few, many = stream.normal(0.01, 0.03, 14), stream.normal(0.004, 0.03, 70)
    return {
        "few": few,
        "few, zeros": np.append(few, np.zeros(4)),
        "few, ties": np.round(few, 2),
        "25": many[:25],
        "26": many[:26],
        "many": many,
        "many, ties and zeros": np.append(np.round(many, 2), np.zeros(9)),
    }


@pytest.mark.parametrize("name", signed_rank_cases())
def test_signed_rank_is_scipys(name: str) -> None:
    """scipy.stats.wilcoxon without zeros (Wilcoxon's own way) and without continuity correction:
    exact up to 25 returns that do not tie, else normal with the variance corrected for ties."""
    car = signed_rank_cases()[name]
    found = result(signed_rank(sample_of(car, np.full(len(car), 0.02))))
    plain = {"zero_method": "wilcox", "correction": False, "method": "asymptotic"}
    normal = stats.wilcoxon(car, **plain)
    above = stats.wilcoxon(car, alternative="greater", **plain)
    assert found.statistic == pytest.approx(above.zstatistic, rel=1e-12)
    used = car[car != 0]
    if len(used) > 25 or "ties" in name:
        assert found.distribution == "normal"
        assert found.p_value == pytest.approx(normal.pvalue, rel=1e-9)
        return
    exact = stats.wilcoxon(used, method="exact")
    assert found.distribution == "exact"
    assert found.p_value == pytest.approx(exact.pvalue, rel=1e-12)


def test_exact_signed_rank_by_all_signs() -> None:
    """Every one of the 2^10 ways to sign ten ranks, equally likely (Wilcoxon 1945)."""
    car = np.array([0.031, -0.004, 0.012, 0.027, -0.019, 0.044, 0.008, 0.036, 0.0, -0.002, 0.015])
    used = car[car != 0]
    ranks = stats.rankdata(np.abs(used))
    signs = (np.arange(2**10)[:, None] >> np.arange(10)) & 1
    sums = signs @ ranks
    own = ranks[used > 0].sum()
    p = min(1.0, 2 * min((sums >= own).mean(), (sums <= own).mean()))
    found = result(signed_rank(sample_of(car, np.full(len(car), 0.02))))
    assert found.facts["positive_rank_sum"] == own
    assert found.p_value == pytest.approx(p, rel=1e-12)


FIFTY = [key for key in REAL if key.endswith("N50")]


@pytest.fixture(scope="module")
def few_rates(prices: PricePanel) -> dict[str, dict[str, float]]:
    """400 times 50 random events; the 2,000 of the reference are left to the benchmark."""
    events = drawn(prices, 50, 400, seed=11)
    return {name: drawn_rates(events, 50, *REAL[name][1:]) for name in FIFTY}


@pytest.mark.parametrize("test", KEYS)
@pytest.mark.parametrize("name", FIFTY)
def test_size_and_power_on_real_prices(
    name: str, test: str, few_rates: dict[str, dict[str, float]]
) -> None:
    """The rates of independent code over 2,000 draws (events.json), within four standard errors
    of the difference between its draws and these."""
    cases = {
        **CASES["size_random_dates"]["expected"],
        **CASES["size_event_variance"]["expected"],
    }
    known = cases[f"{name}.{test}"]["value"]
    error = np.sqrt(known * (1 - known) * (1 / 400 + 1 / 2000))
    assert abs(few_rates[name][test] - known) <= 4 * error
