"""Laying prices on sessions, and what the calendar, the prices and the benchmark say of each
other. The thresholds checked are common practice, no source."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from pipeline.core import prices as price_values
from pipeline.core.findings import Finding, Severity
from pipeline.core.prices import PricePanel
from pipeline.returns.jumps import suspected_splits
from pipeline.returns.panel import build_panels, simple_returns
from pipeline.returns.sessions import sessions_between
from tests.returns.panels import panel_of_closes, weekdays

DAYS = sessions_between("XLON", "2019-01-02", "2019-12-31").days


def long_prices(close: np.ndarray, codes: list[str], days: np.ndarray = DAYS) -> pd.DataFrame:
    wide = pd.DataFrame(close, index=days.astype("datetime64[s]"), columns=codes)
    table = wide.rename_axis("date").reset_index().melt("date", None, "security", "close")
    return table.assign(volume=1000.0)[["security", "date", "close", "volume"]]


def benchmark(days: np.ndarray = DAYS, exchange: str = "XLON") -> pd.DataFrame:
    level = 1000 + np.arange(len(days), dtype=float)
    return pd.DataFrame(
        {"exchange": exchange, "date": days.astype("datetime64[s]"), "close": level}
    )


def walk(securities: int = 6, seed: int = 1) -> tuple[np.ndarray, list[str]]:
    stream = np.random.default_rng(seed)
    moves = stream.normal(0, 0.01, (len(DAYS), securities))
    return 100 * np.cumprod(1 + moves, axis=0), [f"S{at}" for at in range(securities)]


def listings(codes: list[str], exchange: str = "XLON") -> pd.DataFrame:
    return pd.DataFrame({"security": codes, "exchange": exchange})


def built(
    prices: pd.DataFrame, codes: list[str], level: pd.DataFrame | None = None
) -> tuple[PricePanel, list[Finding]]:
    own = benchmark() if level is None else level
    panels, _, findings = build_panels(listings(codes), prices, own, None, ())
    return panels["XLON"], findings


def only(findings: list[Finding], rule: str) -> Finding:
    assert [finding.rule for finding in findings] == [rule]
    return findings[0]


def test_simple_returns_never_span_a_gap() -> None:
    close = np.array([[100.0], [110.0], [np.nan], [121.0], [133.1], [133.1]])
    found = simple_returns(close)[:, 0]
    np.testing.assert_allclose(found, [np.nan, 0.1, np.nan, np.nan, 0.1, 0.0], atol=1e-12)


def test_prices_lie_where_their_dates_say() -> None:
    close, codes = walk()
    table = long_prices(close, codes).sample(frac=1, random_state=3)
    panel, findings = built(table, codes)
    assert findings == []
    assert panel.securities == tuple(codes)
    np.testing.assert_array_equal(panel.sessions, DAYS)
    np.testing.assert_array_equal(panel.close, close)
    pandas = pd.DataFrame(close).pct_change(fill_method=None).to_numpy()
    np.testing.assert_allclose(panel.returns, pandas, atol=1e-15)
    assert panel.close.flags.f_contiguous
    level = benchmark()["close"].pct_change().to_numpy()
    np.testing.assert_allclose(panel.benchmark, level, atol=1e-15)


def test_sessions_run_past_the_last_price_and_the_panel_does_not() -> None:
    """An announcement after the last price must still find its session."""
    close, codes = walk()
    panels, calendars, _ = build_panels(
        listings(codes), long_prices(close[:100], codes, DAYS[:100]), benchmark(), None, ()
    )
    assert len(panels["XLON"].sessions) == 100
    assert calendars["XLON"].days[-1] > panels["XLON"].sessions[-1]
    np.testing.assert_array_equal(calendars["XLON"].days[:100], panels["XLON"].sessions)


def test_each_exchange_has_its_own_sessions_and_benchmark() -> None:
    close, codes = walk(2)
    new_york = sessions_between("XNYS", "2019-01-02", "2019-12-31").days
    prices = pd.concat(
        [
            long_prices(close, codes),
            long_prices(np.full((len(new_york), 1), 50.0), ["N"], new_york),
        ]
    )
    both = pd.concat([listings(codes), listings(["N"], "XNYS")])
    levels = pd.concat([benchmark(), benchmark(new_york, "XNYS")])
    panels, _, findings = build_panels(both, prices, levels, None, ())
    assert findings == []
    np.testing.assert_array_equal(panels["XNYS"].sessions, new_york)
    assert panels["XNYS"].securities == ("N",)
    assert len(panels["XLON"].sessions) != len(panels["XNYS"].sessions)


def test_factors_are_laid_on_the_sessions() -> None:
    close, codes = walk(2)
    values = np.linspace(-0.01, 0.01, len(DAYS))
    factors = pd.DataFrame(
        {"exchange": "XLON", "date": DAYS.astype("datetime64[s]"), "size": values, "spare": 0.0}
    ).drop(index=5)
    panels, _, _ = build_panels(
        listings(codes), long_prices(close, codes), benchmark(), factors, ("size",)
    )
    assert list(panels["XLON"].factors) == ["size"]
    wanted = values.copy()
    wanted[5] = np.nan
    np.testing.assert_array_equal(panels["XLON"].factors["size"], wanted)


@pytest.mark.parametrize(("rows", "severity"), [(3, Severity.WARNING), (60, Severity.ERROR)])
def test_prices_on_days_without_a_session(rows: int, severity: Severity) -> None:
    close, codes = walk()
    saturdays = pd.date_range("2019-01-05", periods=rows // 3, freq="7D")
    extra = long_prices(np.ones((rows // 3, 3)), codes[:3], saturdays.to_numpy())
    panel, findings = built(pd.concat([long_prices(close, codes), extra]), codes)
    finding = only(findings, "price_off_session")
    assert (finding.severity, finding.file, finding.column) == (severity, "prices", "date")
    assert "2019-01-05" in finding.got
    np.testing.assert_array_equal(panel.close, close)


def test_empty_cells_on_holidays_are_no_prices() -> None:
    """A wide sheet turned long has a row on every weekday, without a price on holidays."""
    close, codes = walk()
    holidays = np.array(["2019-04-19", "2019-04-22", "2019-05-06", "2019-12-25", "2019-12-26"])
    blank = long_prices(np.full((5, 6), np.nan), codes, holidays.astype("datetime64[D]"))
    _, findings = built(pd.concat([long_prices(close, codes), blank]), codes)
    assert findings == []


@pytest.mark.parametrize(("missing", "severity"), [(2, Severity.WARNING), (9, Severity.ERROR)])
def test_a_benchmark_with_gaps(missing: int, severity: Severity) -> None:
    close, codes = walk()
    level = benchmark().drop(index=range(50, 50 + missing))
    panel, findings = built(long_prices(close, codes), codes, level)
    finding = only(findings, "benchmark_gap")
    assert (finding.severity, finding.file, finding.column) == (severity, "benchmarks", "close")
    assert f"XLON: no level on {missing} sessions" in finding.got
    assert str(DAYS[50]) in finding.got
    assert np.isnan(panel.benchmark[50 : 51 + missing]).all()


def test_a_benchmark_that_is_not_there() -> None:
    close, codes = walk()
    _, findings = built(long_prices(close, codes), codes, benchmark(exchange="XNYS"))
    assert only(findings, "benchmark_gap").severity is Severity.ERROR


def test_a_session_on_which_most_have_no_price() -> None:
    close, codes = walk()
    close[80, :4] = np.nan
    close[90, :3] = np.nan
    _, findings = built(long_prices(close, codes), codes)
    finding = only(findings, "session_without_prices")
    assert finding.severity is Severity.WARNING
    assert str(DAYS[80]) in finding.got
    assert str(DAYS[90]) not in finding.got


def test_a_few_securities_do_not_close_an_exchange() -> None:
    """Of fewer than five, most may miss a day by chance."""
    close, codes = walk(4)
    close[80, :3] = np.nan
    _, findings = built(long_prices(close, codes), codes)
    assert findings == []


def test_listings_that_begin_and_end_are_no_closed_sessions() -> None:
    close, codes = walk(12)
    close[:120, :6] = np.nan
    close[130:, 6:] = np.nan
    _, findings = built(long_prices(close, codes), codes)
    assert findings == []


@pytest.mark.parametrize(
    ("factor", "market", "found"),
    [
        (2.0, 0.001, True),
        (0.5, 0.001, True),
        (1 / 3, 0.001, True),
        (10.2, 0.001, True),
        (0.1, 0.001, True),
        (1.5, 0.001, False),  # a jump of half is news, not a split
        (0.56, 0.001, False),
        (0.5, -0.08, False),  # the market fell as well
    ],
)
def test_a_jump_by_a_whole_factor_in_a_calm_market(
    factor: float, market: float, found: bool
) -> None:
    days = weekdays(60)
    close = np.full((60, 1), 100.0)
    close[40:] *= factor
    level = np.full(60, 1000.0)
    level[40:] *= 1 + market
    suspects = suspected_splits(panel_of_closes(days, ["S"], close, level))
    assert suspects == ({"S": [days[40]]} if found else {})


def test_a_panel_refuses_shapes_that_disagree() -> None:
    good = panel_of_closes(weekdays(4), ["A", "B"], np.ones((4, 2)), np.ones(4))
    parts = {name: getattr(good, name) for name in good.__slots__}
    for name, wrong in (("close", np.ones((3, 2))), ("benchmark", np.ones(5))):
        with pytest.raises(ValueError, match=name):
            PricePanel(**{**parts, name: wrong})


def test_a_panel_finds_sessions_and_columns() -> None:
    days = weekdays(4, "2021-01-07")
    panel = panel_of_closes(days, ["A", "B"], np.ones((4, 2)), np.ones(4))
    assert panel.position(np.datetime64("2021-01-08")) == 1
    assert panel.position(np.datetime64("2021-01-09")) == 2  # a Saturday: the next session
    assert panel.position(np.datetime64("2022-01-01")) == 4
    assert panel.column("B") == 1
    with pytest.raises(KeyError, match="C"):
        panel.column("C")


def found_in(close: np.ndarray, codes: list[str]) -> tuple[list[Finding], dict[str, list]]:
    prices = long_prices(close, codes)
    panels, _, findings = build_panels(listings(codes), prices, benchmark(), None, ())
    return findings, suspected_splits(panels["XLON"])


def test_the_securities_looked_at_together_change_nothing(monkeypatch: pytest.MonkeyPatch) -> None:
    close, codes = walk(9)
    close[90:, 7] *= 100
    close[70:, 2] *= 100
    close[120:, 4] /= 2
    close[150:] *= np.linspace(1.2, 1.3, 9)  # all at once: two downloads put together
    whole = found_in(close, codes)
    assert {"price_unit", "prices_of_two_downloads"} <= {found.rule for found in whole[0]}
    assert list(whole[1]) == ["S4"]
    monkeypatch.setattr(price_values, "AT_ONCE", 2)
    assert found_in(close, codes) == whole


def test_unknown_volumes_take_no_memory() -> None:
    close, codes = walk(3)
    prices = long_prices(close, codes).assign(volume=np.nan)
    panel = build_panels(listings(codes), prices, benchmark(), None, ())[0]["XLON"]
    assert panel.volume.shape == panel.close.shape
    assert np.isnan(panel.volume).all()
    assert panel.volume.strides == (0, 0)
