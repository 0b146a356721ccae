"""What becomes of gaps, and of the kind of return: each policy by a loop, and through a study.

Trade-to-trade returns: Maynes and Rumsey 1993, J. Banking & Finance 17; the fit of returns over
several sessions is held against statsmodels in test_trade_to_trade.
"""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from hypothesis import given
from hypothesis import strategies as st

from pipeline.core.findings import InputProblem
from pipeline.core.window import Window
from pipeline.returns.policies import alive, in_logs, lumped, since_last_close, trade_to_trade
from tests.returns.markets import EVENT, Market, market, said
from tests.returns.panels import invented_panel
from tests.returns.test_price_faults import put, returns_file

S0 = "S0"


def test_returns_since_the_last_close_by_hand() -> None:
    close = np.array([[np.nan], [100.0], [110.0], [np.nan], [np.nan], [121.0], [121.0], [np.nan]])
    returns, spans = since_last_close(close)
    wanted = [np.nan, np.nan, 0.1, np.nan, np.nan, 0.1, 0.0, np.nan]
    np.testing.assert_allclose(returns[:, 0], wanted, atol=1e-12)
    assert spans[:, 0].tolist() == [1, 1, 1, 1, 1, 3, 1, 1]
    panel = replace(
        invented_panel(len(close), 1), close=close, volume=close, returns=returns, asked=None
    )
    np.testing.assert_array_equal(alive(panel)[:, 0], [False] + [True] * 6 + [False])
    read = np.array([[True]] * 3 + [[False]] * 2 + [[True]] * 3)
    seen = alive(replace(panel, asked=read))[:, 0]
    np.testing.assert_array_equal(seen, [False, True, True, False, False, True, True, False])


@given(st.lists(st.booleans(), min_size=3, max_size=40), st.integers(0, 1000))
def test_whatever_the_gaps_nothing_of_the_move_is_lost(quoted: list[bool], seed: int) -> None:
    """The compounded returns are the last close over the first, and spans add up to the time."""
    close = 100 * np.exp(np.random.default_rng(seed).normal(0, 0.02, (len(quoted), 1)))
    close[~np.array(quoted)] = np.nan
    panel = replace(
        invented_panel(len(quoted), 1),
        close=close,
        returns=np.full_like(close, np.nan),
    )
    known = np.flatnonzero(np.isfinite(close[:, 0]))
    both = (trade_to_trade(panel), lumped(panel))
    for made in both:
        total = np.prod(1 + np.nan_to_num(made.returns[:, 0]))
        wanted = close[known[-1], 0] / close[known[0], 0] if known.size else 1.0
        assert total == pytest.approx(wanted)
    spans = both[0].spans
    assert spans is not None
    if known.size:
        assert spans[known[1:], 0].sum() == known[-1] - known[0]
        inside = both[1].returns[known[0] + 1 : known[-1] + 1, 0]
        assert np.isfinite(inside).all()


def test_logarithms_of_securities_and_benchmark() -> None:
    panel = invented_panel()
    logged = in_logs(panel)
    np.testing.assert_allclose(np.expm1(logged.returns), panel.returns, atol=1e-15)
    np.testing.assert_allclose(np.expm1(logged.benchmark), panel.benchmark, atol=1e-15)
    lost = panel.returns.copy()
    lost[40, 2] = -1.0
    with pytest.raises(InputProblem) as caught:
        in_logs(replace(panel, returns=lost))
    assert caught.value.findings[0].rule == "total_loss"


def gap_before(policy: str) -> Market:
    made = market()
    put(100, np.nan, 103)(made)
    made.key("event_time", f'missing = "{policy}"')
    return made


def estimation(made: Market, policy: str) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """(m,) returns of S0, compounded benchmark and sessions covered in estimation; by a loop."""
    close, level = made.closes[S0].to_numpy(), made.level.to_numpy()
    rows = []
    last = EVENT - 121
    for at in range(EVENT - 120, EVENT - 20):
        if np.isnan(close[at]):
            continue
        if policy == "trade_to_trade" or at - last == 1:
            rows.append((close[at] / close[last] - 1, level[at] / level[last] - 1, at - last))
        last = at
    returns, benchmark, covered = np.array(rows).T
    return returns, benchmark, covered


@pytest.mark.parametrize("policy", ["drop", "trade_to_trade"])
def test_a_study_fits_what_its_policy_says(policy: str, tmp_path: Path) -> None:
    """statsmodels' weighted least squares on returns made in a loop."""
    made = gap_before(policy)
    told = said(tmp_path, made)
    assert told.measured is not None, told.findings
    returns, benchmark, covered = estimation(made, policy)
    design = np.column_stack([covered, benchmark])
    known = sm.WLS(returns, design, weights=1 / covered).fit()
    abnormal = told.measured.abnormal["market_model"]
    assert abnormal.observations[0] == len(returns) == (96 if policy == "trade_to_trade" else 95)
    np.testing.assert_allclose(abnormal.parameters[0], known.params, rtol=1e-9)
    np.testing.assert_allclose(abnormal.residual_variance[0], known.mse_resid, rtol=1e-9)


def test_lumping_gives_zeros_then_the_whole_move(tmp_path: Path) -> None:
    made = gap_before("lumped")
    told = said(tmp_path, made)
    assert told.measured is not None
    panel = told.measured.measured_on["XLON"]
    close = made.closes[S0].to_numpy()
    wanted = [0.0, 0.0, 0.0, 0.0, close[104] / close[99] - 1]
    np.testing.assert_allclose(panel.returns[100:105, panel.column(S0)], wanted, atol=1e-12)
    assert told.measured.abnormal["market_model"].observations[0] == 100
    plain = told.measured.panels["XLON"]
    assert np.isnan(plain.returns[100:105, plain.column(S0)]).all()


def test_log_returns_are_those_of_a_market_model_in_logs(tmp_path: Path) -> None:
    made = market()
    made.key("event_time", 'returns = "log"')
    told = said(tmp_path, made)
    assert told.measured is not None
    own = np.diff(np.log(made.closes[S0].to_numpy()))
    index = np.diff(np.log(made.level.to_numpy()))
    before = slice(EVENT - 121, EVENT - 21)
    fit = sm.OLS(own[before], sm.add_constant(index[before])).fit()
    inside = slice(EVENT - 2, EVENT + 1)
    car = (own[inside] - fit.predict(sm.add_constant(index[inside], has_constant="add"))).sum()
    found = told.measured.abnormal["market_model"].car(Window(-1, 1))[0]
    assert found == pytest.approx(car, abs=1e-12)


@pytest.mark.parametrize(
    ("factor", "unit", "kind"),
    [(1.0, "", "simple"), (100.0, "percent", "simple"), (1.0, "decimal", "log")],
)
def test_a_file_of_returns_measures_what_its_closes_would(
    factor: float, unit: str, kind: str, tmp_path: Path
) -> None:
    closes, given = tmp_path / "closes", tmp_path / "returns"
    closes.mkdir()
    given.mkdir()
    first = said(closes, market()).measured
    made = market()
    returns_file(factor, unit, kind)(made)
    second = said(given, made).measured
    assert first is not None
    assert second is not None
    one, two = (item.abnormal["market_model"] for item in (first, second))
    np.testing.assert_allclose(one.returns, two.returns, atol=1e-12)
    panel, other = first.panels["XLON"], second.panels["XLON"]
    np.testing.assert_allclose(
        panel.close / panel.close[0], other.close / other.close[0], rtol=1e-10
    )


def test_a_return_after_a_missing_one_is_kept_as_given(tmp_path: Path) -> None:
    """A return that is given covers its own session, whatever is missing before it."""
    made = market()
    returns_file(1.0)(made)
    table = made.raw["prices"]
    gone = (table["security"] == S0) & (table["date"] == str(made.closes.index[100]))
    made.raw["prices"] = table[~gone]
    told = said(tmp_path, made)
    assert told.measured is not None
    assert told.measured.abnormal["market_model"].observations[0] == 99


@pytest.mark.parametrize(
    ("keys", "rule", "column"),
    [
        (
            {"series.prices": 'given = "returns"', "event_time": 'missing = "lumped"'},
            "bad_value",
            "event_time.missing",
        ),
        (
            {"event_time": 'missing = "trade_to_trade"\nreturns = "log"'},
            "bad_value",
            "event_time.returns",
        ),
        (
            {
                "event_time": 'missing = "trade_to_trade"',
                "expected_returns": 'also = ["dimson"]',
            },
            "bad_value",
            "event_time.missing",
        ),
        ({"event_time": 'delisting = "shumway"'}, "bad_value", "inputs.delistings"),
        ({"inputs": 'rates = "rates.parquet"'}, "bad_value", "currency.common"),
        (
            {"currency": 'common = "EUR"', "report": 'currency = "USD million"'},
            "bad_value",
            "report.currency",
        ),
        (
            {"currency": 'common = "EUR"', "series.factors": 'currency = "USD"'},
            "bad_value",
            "series.factors.currency",
        ),
        (
            {
                "inputs": 'factors = "factors.parquet"',
                "event_time": 'returns = "log"',
                "expected_returns": 'also = ["factor_model"]',
            },
            "mixed_returns",
            "event_time.returns",
        ),
    ],
)
def test_choices_that_do_not_fit_together(
    keys: dict[str, str], rule: str, column: str, tmp_path: Path
) -> None:
    made = market()
    for table, lines in keys.items():
        for line in lines.splitlines():
            made.key(table, line)
    told = said(tmp_path, made)
    assert [(finding.rule, finding.column) for finding in told.findings] == [(rule, column)]


def test_the_report_says_what_was_done(tmp_path: Path) -> None:
    from pipeline.study.load import load_study
    from pipeline.study.plan_prices import return_sentences

    made = market()
    plain = " ".join(return_sentences(load_study(made.write(tmp_path))))
    assert "simple daily returns of adjusted closes" in plain
    assert "a gap, never a return of zero" in plain
    made.key("event_time", 'returns = "log"\nmissing = "lumped"\ndelisting = "shumway"')
    made.add("delistings", pd.DataFrame([{"security": S0, "date": "2019-01-02"}]))
    told = " ".join(return_sentences(load_study(made.write(tmp_path))))
    for words in ("logarithmic", "half the variance", "takes the whole move", "Shumway 1997"):
        assert words in told
