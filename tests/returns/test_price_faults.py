"""Faults that price files come with: which rule sees each, and what is done about it.

Thresholds are common practice, no source, where the study file's defaults are meant; the published
delisting returns are Shumway 1997 (JF 52) and Shumway and Warther 1999 (JF 54).
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from pipeline.core.rules import RULES
from tests.returns.markets import DAY, EVENT, SESSIONS, Market, Spoil, market, said

S0 = "S0"


def put(session: int, value: float, last: int | None = None) -> Spoil:
    def spoil(made: Market) -> None:
        made.closes.iloc[session : (last or session) + 1, 0] = value

    return spoil


def times(session: int, factor: float) -> Spoil:
    def spoil(made: Market) -> None:
        made.closes.iloc[session:, 0] *= factor

    return spoil


def some_zero(made: Market) -> None:
    made.closes.iloc[[100, 101], 0] = 0.0
    made.key("screens", "nonpositive_share = 0.01")


def hardly_traded(share: float) -> Spoil:
    def spoil(made: Market) -> None:
        rows = np.arange(EVENT - 120, EVENT - 20)
        still = rows[np.random.default_rng(1).random(100) < share]
        closes = made.closes[S0].to_numpy(copy=True)
        for row in still:
            closes[row] = closes[row - 1]
        made.closes[S0] = closes

    return spoil


def no_volume(first: int, last: int) -> Spoil:
    def spoil(made: Market) -> None:
        made.volumes.iloc[first : last + 1, 0] = 0.0

    return spoil


def halt(made: Market) -> None:
    made.closes.iloc[EVENT : EVENT + 2, 0] = made.closes.iloc[EVENT - 1, 0]
    made.volumes.iloc[EVENT : EVENT + 2, 0] = 0.0


def every(step: int) -> Spoil:
    def spoil(made: Market) -> None:
        made.closes.iloc[np.arange(len(made.closes)) % step != 0] = np.nan

    return spoil


def intraday(rows_a_session: int) -> Spoil:
    def spoil(made: Market) -> None:
        table = made.prices
        parts = [
            table.assign(date=table["date"] + f" {9 + at:02d}:30", close=table["close"] + at)
            for at in range(rows_a_session)
        ]
        made.raw["prices"] = pd.concat(parts)

    return spoil


def returns_file(factor: float, unit: str = "", kind: str = "simple") -> Spoil:
    def spoil(made: Market) -> None:
        table = made.returns()
        values = np.log1p(table["return"]) if kind == "log" else table["return"]
        made.raw["prices"] = table.assign(**{"return": values * factor})
        made.key("series.prices", f'given = "returns"\nreturns = "{kind}"')
        if unit:
            made.key("series.prices", f'unit = "{unit}"')

    return spoil


def benchmark_returns(kind: str) -> Spoil:
    def spoil(made: Market) -> None:
        moves = made.benchmarks.assign(**{"return": made.level.pct_change().to_numpy()})
        made.raw["benchmarks"] = moves.drop(columns="close").dropna()
        made.key("series.benchmarks", f'given = "returns"\nreturns = "{kind}"')

    return spoil


def mixed(made: Market) -> None:
    returns_file(1.0, kind="log")(made)
    benchmark_returns("simple")(made)


def below_everything(made: Market) -> None:
    returns_file(1.0)(made)
    made.raw["prices"].iloc[7, 2] = -1.5


def factor_file(factor: float) -> Spoil:
    def spoil(made: Market) -> None:
        values = np.random.default_rng(2).normal(0, 0.006, len(SESSIONS)) * factor
        frame = {"exchange": "XLON", "date": SESSIONS.astype(str), "size": values}
        made.add("factors", pd.DataFrame(frame))

    return spoil


def short_factor(made: Market) -> None:
    factor_file(1.0)(made)
    made.more["factors"] = made.more["factors"].iloc[EVENT - 80 :]
    made.key("expected_returns", 'also = ["factor_model"]')


def bases(made: Market) -> None:
    made.key("series.prices", 'dividends = "left_out"')
    made.key("series.benchmarks", 'dividends = "included"')


def benchmark_hole(session: int) -> Spoil:
    def spoil(made: Market) -> None:
        made.level = made.level.drop(made.level.index[session])

    return spoil


def two_downloads(made: Market) -> None:
    made.closes.iloc[90:] *= np.array([0.8, 0.85, 1.2, 0.78, 1.25, 0.75])


def saturday(rows: int) -> Spoil:
    def spoil(made: Market) -> None:
        table = made.prices
        days = pd.date_range("2018-01-06", periods=rows, freq="7D").strftime("%Y-%m-%d")
        extra = pd.DataFrame({"security": S0, "date": days, "close": 50.0, "volume": 1.0})
        made.raw["prices"] = pd.concat([table, extra])

    return spoil


def without(companies: int) -> Spoil:
    def spoil(made: Market) -> None:
        made.closes = made.closes.iloc[:, companies:]
        made.volumes = made.volumes.iloc[:, companies:]

    return spoil


def two_rows(change: float) -> Spoil:
    def spoil(made: Market) -> None:
        table = made.prices
        again = table.iloc[[10]].assign(close=table["close"].iloc[10] + change)
        made.raw["prices"] = pd.concat([table, again])

    return spoil


def lumped(made: Market) -> None:
    put(100, np.nan, 103)(made)
    made.key("event_time", 'missing = "lumped"')


def trade_to_trade(made: Market) -> None:
    put(100, np.nan, 103)(made)
    made.key("event_time", 'missing = "trade_to_trade"')


def delisted(
    value: str, reason: str, exchange: str = "XNYS", policy: str = "", ends: int = EVENT + 3
) -> Spoil:
    def spoil(made: Market) -> None:
        made.closes.iloc[ends + 1 :, 0] = np.nan
        if exchange != "XLON":
            made.deals["exchange"] = exchange
            made.raw["benchmarks"] = made.benchmarks.assign(exchange=exchange)
        row = {"security": S0, "date": str(SESSIONS[ends + 1]), "return": value, "reason": reason}
        made.add("delistings", pd.DataFrame([row]))
        if policy:
            made.key("event_time", f'delisting = "{policy}"')

    return spoil


def traded_on(made: Market) -> None:
    row = {"security": S0, "date": DAY, "return": "-0.4", "reason": "performance"}
    made.add("delistings", pd.DataFrame([row]))


FINDINGS: dict[str, tuple[Spoil, str, str, str]] = {
    "many closes of zero": (put(20, 0.0, 29), "nonpositive_price", "error", "of S0"),
    "two closes of zero in a hundred": (some_zero, "nonpositive_price", "warning", "of S0"),
    "a split inside the windows": (times(EVENT, 0.5), "suspected_split", "error", DAY),
    "a split over a gap": (
        lambda made: (put(EVENT, np.nan, EVENT + 1)(made), times(EVENT + 2, 0.5)(made))[0],
        "suspected_split",
        "error",
        str(SESSIONS[EVENT + 2]),
    ),
    "pence from one day on": (times(70, 100.0), "price_unit", "error", str(SESSIONS[70])),
    "closes of two downloads": (
        two_downloads,
        "prices_of_two_downloads",
        "warning",
        str(SESSIONS[90]),
    ),
    "weekly prices": (every(5), "not_daily", "error", "5.0 sessions"),
    "monthly prices": (every(21), "not_daily", "error", "21.0 sessions"),
    "three rows a session": (intraday(3), "intraday_prices", "error", "several rows"),
    "a time of day on each date": (intraday(1), "intraday_prices", "warning", "times of day"),
    "percent read as decimals": (returns_file(100.0), "return_unit", "error", "percent"),
    "decimals declared percent": (returns_file(1.0, "percent"), "return_unit", "warning", ""),
    "returns a hundred times too small": (returns_file(0.005), "return_unit", "error", ""),
    "a factor in percent": (factor_file(100.0), "return_unit", "error", "size"),
    "a factor divided twice": (factor_file(0.01), "return_unit", "error", "size"),
    "a loss of more than everything": (below_everything, "impossible_return", "error", "row 9"),
    "logarithmic against simple": (mixed, "mixed_returns", "error", "logarithmic"),
    "dividends in the index alone": (bases, "dividend_basis", "warning", "too low"),
    "a hole in the benchmark at day zero": (benchmark_hole(EVENT), "benchmark_gap", "error", DAY),
    "a hole in the benchmark before": (benchmark_hole(100), "benchmark_gap", "warning", "1 sess"),
    "prices on one Saturday": (saturday(1), "price_off_session", "warning", "2018-01-06"),
    "prices on many Saturdays": (saturday(50), "price_off_session", "error", "2018-01-06"),
    "a third of the deals without prices": (without(2), "many_without_prices", "error", "S0, S1"),
    "two closes of one date": (two_rows(1.0), "conflicting_price", "error", S0),
    "gaps taken as zero": (lumped, "lumped", "warning", "understates"),
    "prices after a delisting": (traded_on, "traded_after_delisting", "warning", S0),
}  # fmt: skip


@pytest.mark.parametrize("case", FINDINGS)
def test_a_finding_names_the_fault(case: str, tmp_path: Path) -> None:
    spoil, rule, severity, words = FINDINGS[case]
    made = market()
    spoil(made)
    told = said(tmp_path, made)
    assert told.rules().get(rule) == severity, told.rules()
    assert words in told.text(rule)
    assert rule in RULES
    assert (told.measured is None) == (severity == "error")


LEDGER: dict[str, tuple[Spoil, str, str]] = {
    "a split before the windows": (times(100, 0.5), "suspected_split", "dropped"),
    "one price for a week": (put(100, 100.0, 106), "stale_price", "flagged"),
    "a third of the prices unchanged": (hardly_traded(0.35), "thin_trading", "flagged"),
    "most prices unchanged": (hardly_traded(0.8), "thin_trading", "dropped"),
    "many sessions without volume": (no_volume(80, 120), "no_trades", "flagged"),
    "ten sessions missing before": (put(90, np.nan, 99), "gaps_in_estimation", "flagged"),
    "day zero missing": (put(EVENT, np.nan), "event_missing", "dropped"),
    "listed two months before": (put(0, np.nan, EVENT - 80), "short_estimation", "dropped"),
    "no price after the third day": (put(EVENT + 4, np.nan, 260), "delisted", "flagged"),
    "no price on the last day held": (put(EVENT + 10, np.nan, 260), "delisted", "flagged"),
    "halted on day zero": (halt, "halted", "changed"),
    "a return of sixty percent": (times(EVENT, 1.62), "large_return", "flagged"),
    "a factor that begins late": (short_factor, "short_under_model", "flagged"),
    "no prices of one company": (without(1), "no_prices", "dropped"),
    "gaps taken as zero": (lumped, "lumped_returns", "changed"),
    "returns over gaps": (trade_to_trade, "longer_returns", "changed"),
    "a delisting return": (delisted("-0.4", "performance", "XLON"), "delisting_return", "changed"),
}


@pytest.mark.parametrize("case", LEDGER)
def test_the_ledger_names_the_fault(case: str, tmp_path: Path) -> None:
    spoil, rule, action = LEDGER[case]
    made = market()
    spoil(made)
    told = said(tmp_path, made)
    assert ("D0", rule, action) in told.ledger, (told.rules(), told.ledger)
    assert rule in RULES
    kept = [] if told.measured is None else list(told.measured.deals["deal_id"])
    assert ("D0" in kept) == (action != "dropped")
    others = {deal for deal, _, _ in told.ledger} - {"D0"}
    assert not others or case == "a factor that begins late"


def test_sound_prices_are_not_doubted(tmp_path: Path) -> None:
    told = said(tmp_path, market())
    assert told.ledger == ()
    assert set(told.rules()) <= {"few_events", "few_dates"}


def test_order_and_equal_repeats_make_no_difference(tmp_path: Path) -> None:
    plain, mixed_up = tmp_path / "a", tmp_path / "b"
    for folder in (plain, mixed_up):
        folder.mkdir()
    made = market()
    first = said(plain, made).measured
    two_rows(0.0)(made)
    made.raw["prices"] = made.raw["prices"].sample(frac=1, random_state=1)
    second = said(mixed_up, made).measured
    assert first is not None
    assert second is not None
    np.testing.assert_array_equal(
        first.abnormal["market_model"].returns, second.abnormal["market_model"].returns
    )


@pytest.mark.parametrize(
    ("value", "reason", "exchange", "policy", "added"),
    [
        ("-0.4", "merger", "XNYS", "supplied", -0.4),
        ("", "performance", "XNYS", "supplied", None),
        ("", "performance", "XNYS", "shumway", -0.30),
        ("", "performance", "XNAS", "shumway", -0.55),
        ("", "merger", "XNAS", "shumway", None),
        ("", "performance", "XLON", "shumway", None),
        ("-0.4", "performance", "XNAS", "shumway", -0.4),
        ("-0.4", "performance", "XNYS", "drop", None),
        ("-1", "performance", "XNYS", "supplied", -1.0),
    ],
)
def test_the_delisting_return_counts_by_policy(
    value: str, reason: str, exchange: str, policy: str, added: float | None, tmp_path: Path
) -> None:
    """Shumway 1997: -30% on the New York and American exchanges; with Warther 1999: -55% on Nasdaq;
    for delistings for performance that have no return of their own."""
    made = market()
    made.closes = made.closes.iloc[: len(SESSIONS)]
    delisted(value, reason, exchange, policy)(made)
    if exchange != "XLON":
        _on_sessions_of(made, exchange)
    told = said(tmp_path, made)
    assert told.measured is not None, told.findings
    panel = told.measured.panels[exchange]
    column = panel.column(S0)
    last = int(np.flatnonzero(np.isfinite(panel.close[:, column]))[-1])
    if added is None:
        assert ("D0", "delisting_return", "changed") not in told.ledger
        assert panel.delisted is None or panel.delisted[column] == -1
    else:
        assert ("D0", "delisting_return", "changed") in told.ledger
        assert panel.returns[last, column] == pytest.approx(added)
        assert panel.close[last, column] == pytest.approx(
            panel.close[last - 1, column] * (1 + added)
        )
    assert ("D0", "delisted", "flagged") in told.ledger


def _on_sessions_of(made: Market, exchange: str) -> None:
    """Date the tables by the sessions of another exchange, of which there are as many or more."""
    from pipeline.returns.sessions import sessions_between

    days = sessions_between(exchange, "2018-01-02", "2019-03-29").days[: len(SESSIONS)].astype(str)
    made.closes.index = pd.Index(days, name="date")
    made.volumes.index = made.closes.index
    made.level.index = made.closes.index
    made.raw["benchmarks"] = made.benchmarks.assign(exchange=exchange)
    made.deals["announced_at"] = f"{days[EVENT]}T10:00:00-04:00"
    made.more["delistings"]["date"] = days[EVENT + 4]


def test_a_delisting_on_the_last_day_is_compounded_into_it(tmp_path: Path) -> None:
    made = market()
    delisted("-0.4", "performance", "XLON")(made)
    made.more["delistings"]["date"] = str(SESSIONS[EVENT + 3])
    before = float(made.closes[S0].iloc[EVENT + 3] / made.closes[S0].iloc[EVENT + 2] - 1)
    told = said(tmp_path, made)
    assert told.measured is not None
    panel = told.measured.panels["XLON"]
    found = panel.returns[EVENT + 3, panel.column(S0)]
    assert found == pytest.approx((1 + before) * 0.6 - 1)


def test_day_zero_of_a_halted_share_is_its_next_trade(tmp_path: Path) -> None:
    made = market()
    halt(made)
    told = said(tmp_path, made)
    assert told.measured is not None
    row = told.measured.deals.set_index("deal_id").loc["D0"]
    assert str(row["day_zero"])[:10] == str(SESSIONS[EVENT + 2])
    assert f"Not traded on {DAY}" in row["day_zero_reason"]
    made.key("screens", "longest_halt = 0")
    other = tmp_path / "never"
    other.mkdir()
    stays = said(other, made)
    assert stays.measured is not None
    assert not any(rule == "halted" for _, rule, _ in stays.ledger)


def test_day_zero_without_a_price_is_the_next_one_where_gaps_are_lumped(tmp_path: Path) -> None:
    made = market()
    put(EVENT, np.nan, EVENT + 2)(made)
    made.closes.iloc[EVENT + 3 :, 0] *= 1.2
    lumped(made)
    told = said(tmp_path, made)
    assert ("D0", "halted", "changed") in told.ledger
    assert told.measured is not None
    row = told.measured.deals.set_index("deal_id").loc["D0"]
    assert str(row["day_zero"])[:10] == str(SESSIONS[EVENT + 3])
    found = told.measured.abnormal["market_model"]
    at = found.deals.index("D0")
    assert np.isfinite(found.returns[at]).all()
    assert found.returns[at, -found.span.start] == pytest.approx(0.2, abs=0.08)


def test_a_deal_without_returns_under_another_model_stays(tmp_path: Path) -> None:
    made = market()
    short_factor(made)
    told = said(tmp_path, made)
    assert told.measured is not None
    assert np.isfinite(told.measured.abnormal["market_model"].returns).all()
    assert np.isnan(told.measured.abnormal["factor_model"].returns).all()
