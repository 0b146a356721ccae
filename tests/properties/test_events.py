"""What must hold whatever the numbers: scale, order, shift, algebra, and losses that add up."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from pipeline.characteristics.recipes import winsorised
from pipeline.core.abnormal import ARRAYS, AbnormalReturns
from pipeline.core.estimate import TestResult
from pipeline.core.ledger import Action, Ledger, LedgerEntry, StageLedger
from pipeline.core.multiplicity import holm
from pipeline.core.prices import PricePanel
from pipeline.core.window import Window
from pipeline.inputs.files import Source
from pipeline.inputs.read import Tables, read_inputs
from pipeline.inputs.wanted import Wanted
from pipeline.registry import TABLE, TESTS
from pipeline.returns.day_zero import place
from pipeline.returns.events import masked_sessions
from pipeline.returns.expected import market_model
from pipeline.returns.measure import measure
from pipeline.returns.repeats import settle_repeats
from pipeline.returns.sessions import Sessions, sessions_between
from pipeline.significance.pairs import pairwise
from pipeline.significance.sample import car_sample
from tests.returns.panels import (
    ESTIMATION,
    SPAN,
    fitted,
    invented_panel,
    panel_of_closes,
)
from tests.significance.samples import clustered

HEADLINE = Window(-1, 1)
VALUES = tuple("estimation_days" if name == "estimation_sessions" else name for name in ARRAYS)
FEW = settings(max_examples=25, deadline=None, derandomize=True)
WITH_FILES = settings(
    max_examples=8,
    deadline=None,
    derandomize=True,
    suppress_health_check=[HealthCheck.function_scoped_fixture],
)
days = st.integers(-40, 40)
windows = st.tuples(days, days).map(lambda pair: Window(min(pair), max(pair)))
values = st.floats(-1e3, 1e3, allow_nan=False)


@pytest.fixture(scope="module")
def panel() -> PricePanel:
    return invented_panel()


@pytest.fixture(scope="module")
def calendar() -> Sessions:
    return sessions_between("XLON", "2019-01-02", "2019-12-31")


@pytest.fixture(scope="module")
def abnormal() -> AbnormalReturns:
    return clustered(deals=12)


@given(factor=st.floats(1e-4, 1e4), level=st.floats(1e-3, 1e3))
@FEW
def test_prices_times_a_constant(factor: float, level: float, panel: PricePanel) -> None:
    index = level * np.cumprod(1 + np.nan_to_num(panel.benchmark))
    scaled = panel_of_closes(panel.sessions, panel.securities, panel.close * factor, index)
    for window in (HEADLINE, SPAN):
        one = fitted("market_model", panel, [0, 4], [200, 260]).standardised(window)
        other = fitted("market_model", scaled, [0, 4], [200, 260]).standardised(window)
        np.testing.assert_allclose(one, other, rtol=1e-8)


@given(rows=st.permutations(range(10)), columns=st.permutations(range(6)))
@FEW
def test_order_of_deals_and_of_securities(
    rows: list[int], columns: list[int], panel: PricePanel
) -> None:
    stream = np.random.default_rng(5)
    located = pd.DataFrame(
        {
            "deal_id": [f"D{at}" for at in range(10)],
            "exchange": "XLON",
            "column": stream.integers(0, 6, 10),
            "position": stream.integers(140, 300, 10),
        }
    )
    masked = stream.random((10, len(ESTIMATION))) < 0.05
    shuffled = replace(
        panel,
        securities=tuple(panel.securities[at] for at in columns),
        **{name: getattr(panel, name)[:, columns] for name in ("close", "volume", "returns")},
    )
    moved = located.iloc[rows].assign(column=lambda table: np.argsort(columns)[table["column"]])

    def measured(table: pd.DataFrame, mask: np.ndarray, prices: PricePanel) -> AbnormalReturns:
        panels = {"XLON": prices}
        return measure("market_model", market_model, table, mask, panels, ESTIMATION, SPAN)

    one = measured(located, masked, panel).take(np.array(rows))
    other = measured(moved, masked[rows], shuffled)
    assert one.deals == other.deals
    for name in VALUES:
        np.testing.assert_array_equal(getattr(one, name), getattr(other, name))


@given(shift=st.integers(1, 2000))
@FEW
def test_clocks_and_calendar_shifted_together(shift: int, calendar: Sessions) -> None:
    """Whole days on both sides: every announcement keeps its place."""
    later = replace(
        calendar,
        days=calendar.days + shift,
        opens=calendar.opens + np.timedelta64(shift, "D"),
        closes=calendar.closes + np.timedelta64(shift, "D"),
        zone="UTC",
    )
    here = replace(calendar, zone="UTC")
    stream = np.random.default_rng(shift)
    seconds = stream.integers(0, 300 * 86400, 50).astype("timedelta64[s]")
    instants = np.datetime64("2019-02-01", "s") + seconds
    instants[::7] = np.datetime64("NaT")
    dates = np.datetime64("2019-02-01", "D") + stream.integers(0, 300, 50)
    one = place(instants, dates, here)
    other = place(instants + np.timedelta64(shift, "D"), dates + shift, later)
    np.testing.assert_array_equal(one.position, other.position)
    assert one.timing == other.timing


@given(seconds=st.integers(0, 360 * 86400), cutoff=st.integers(0, 120))
@FEW
def test_day_zero_is_the_first_close_that_could_know(
    seconds: int, cutoff: int, calendar: Sessions
) -> None:
    instant = np.datetime64("2019-01-03", "s") + np.timedelta64(seconds, "s")
    found = place(np.array([instant]), np.array([instant], "datetime64[D]"), calendar, cutoff)
    at, limit = int(found.position[0]), calendar.closes - np.timedelta64(cutoff, "m")
    assert at == len(limit) or instant <= limit[at]
    assert at == 0 or limit[at - 1] < instant


@given(one=windows, other=windows)
@FEW
def test_windows_as_sets(one: Window, other: Window) -> None:
    mine, theirs = (set(range(w.start, w.end + 1)) for w in (one, other))
    assert len(one) == len(mine)
    assert one.overlaps(other) == other.overlaps(one) == bool(mine & theirs)
    assert (one < other) == ((one.start, one.end) < (other.start, other.end))


@given(split=st.integers(-10, 9))
@FEW
def test_cumulation_adds_up_over_neighbouring_windows(split: int, panel: PricePanel) -> None:
    found = fitted("market_model", panel, [0, 1], [200, 260])
    left, right = Window(-10, split), Window(split + 1, 10)
    np.testing.assert_allclose(
        found.car(left) + found.car(right), found.car(SPAN), rtol=1e-10, atol=1e-15
    )
    whole = found.forecast_covariance(SPAN)
    at = len(left)
    np.testing.assert_allclose(whole[:, :at, :at], found.forecast_covariance(left))
    np.testing.assert_allclose(whole[:, at:, at:], found.forecast_covariance(right))


@given(
    rows=st.lists(st.integers(0, 11), min_size=1, max_size=20),
    again=st.lists(st.integers(0, 100), max_size=20),
)
@FEW
def test_taking_twice_is_taking_once(
    rows: list[int], again: list[int], abnormal: AbnormalReturns
) -> None:
    first = np.array(rows, dtype=np.int64)
    second = np.array([at % len(rows) for at in again], dtype=np.int64)
    twice, once = abnormal.take(first).take(second), abnormal.take(first[second])
    assert twice.deals == once.deals
    for name in VALUES:
        np.testing.assert_array_equal(getattr(twice, name), getattr(once, name))


@given(
    drawn=st.lists(st.tuples(values, st.booleans()), min_size=1, max_size=40),
    share=st.floats(0.0, 0.49),
)
@FEW
def test_winsorised_values_stay_within_those_used(
    drawn: list[tuple[float, bool]], share: float
) -> None:
    raw = np.array([value for value, _ in drawn])
    used = np.array([flag for _, flag in drawn])
    used[0] = True
    found = winsorised(raw, used, share)
    low, high = np.quantile(raw[used], [share, 1 - share])
    assert found.min() >= low
    assert found.max() <= high
    inside = (raw >= low) & (raw <= high)
    np.testing.assert_array_equal(found[inside], raw[inside])
    assert (np.diff(found[np.argsort(raw, kind="stable")]) >= 0).all()
    if share == 0.0:
        np.testing.assert_array_equal(found[used], raw[used])


@given(st.lists(st.floats(0, 1), min_size=1, max_size=30))
@FEW
def test_holm_never_helps_and_keeps_the_order(p: list[float]) -> None:
    raw, found = np.array(p), holm(np.array(p))
    assert (found >= raw).all()
    assert (found <= np.minimum(1, raw * len(raw))).all()
    assert (np.diff(found[np.argsort(raw, kind="stable")]) >= 0).all()


@given(seed=st.integers(0, 10_000), gap=st.floats(0, 0.6))
@FEW
def test_correlations_are_correlations(seed: int, gap: float) -> None:
    stream = np.random.default_rng(seed)
    returns = stream.normal(size=(5, 60))
    returns[stream.random(returns.shape) < gap] = np.nan
    dates = np.datetime64("2020-01-01") + np.tile(np.arange(60), (5, 1))
    found, common = pairwise(returns, dates)
    np.testing.assert_allclose(found, found.T)
    np.testing.assert_array_equal(common, common.T)
    known = np.isfinite(found)
    assert (np.abs(found[known]) <= 1).all()
    np.testing.assert_allclose(np.diag(found), 1.0)


@pytest.fixture(scope="module")
def evidence(abnormal: AbnormalReturns) -> dict[str, float]:
    """p-values of the tests that apply to twelve deals."""
    sample = car_sample(abnormal, HEADLINE, 1.0)
    found = {item.key: item.load()(sample) for item in TABLE[TESTS]}
    return {key: test.p_value for key, test in found.items() if isinstance(test, TestResult)}


@given(scale=st.floats(1e-3, 1e3), seed=st.integers(0, 100))
@settings(FEW, max_examples=8)
def test_the_unit_of_returns_is_no_evidence(
    scale: float, seed: int, abnormal: AbnormalReturns, evidence: dict[str, float]
) -> None:
    rows = np.random.default_rng(seed).permutation(12)
    scaled = replace(
        abnormal.take(rows),
        returns=abnormal.returns[rows] * scale,
        estimation_returns=abnormal.estimation_returns[rows] * scale,
        residual_variance=abnormal.residual_variance[rows] * scale**2,
    )
    sample = car_sample(scaled, HEADLINE, 1.0)
    for item in TABLE[TESTS]:
        found = item.load()(sample)
        assert isinstance(found, TestResult) == (item.key in evidence)
        if isinstance(found, TestResult):
            assert found.p_value == pytest.approx(evidence[item.key], rel=1e-6)


@given(st.lists(st.tuples(st.integers(0, 3), st.integers(100, 130)), min_size=1, max_size=15))
@FEW
def test_repeated_deals_add_up_and_never_meet(deals: list[tuple[int, int]]) -> None:
    located = pd.DataFrame(
        {
            "deal_id": [f"D{at:02d}" for at in range(len(deals))],
            "security": [f"S{code}" for code, _ in deals],
            "position": [position for _, position in deals],
            "exchange": "XLON",
            "day_zero": pd.Timestamp("2020-01-01"),
        }
    )
    kept, ledger = settle_repeats(located, HEADLINE)
    assert ledger.rows_in == len(kept) + len(ledger.dropped)
    assert set(kept["deal_id"]) | {entry.deal for entry in ledger.dropped} == set(
        located["deal_id"]
    )
    for _, own in kept.groupby("security"):
        assert (np.diff(np.sort(own["position"])) >= len(HEADLINE)).all()
    again, _ = settle_repeats(located.sample(frac=1, random_state=1), HEADLINE)
    assert sorted(again["deal_id"]) == sorted(kept["deal_id"])
    masked = masked_sessions(kept, located, ESTIMATION, 5, {})
    assert masked.shape == (len(kept), len(ESTIMATION))
    first = located.groupby("security")["position"].transform("min") == located["position"]
    assert not masked[kept["deal_id"].isin(located.loc[first, "deal_id"]).to_numpy()].any()


@given(
    st.lists(
        st.tuples(st.integers(0, 3), st.integers(100, 120), st.sampled_from([1.0, 2.5, np.nan])),
        min_size=1,
        max_size=15,
    ),
    st.sampled_from(["keep_first", "merge", "keep_all"]),
)
@FEW
def test_however_repeats_are_settled_nothing_is_lost(
    deals: list[tuple[int, int, float]], policy: str
) -> None:
    """Every deal is kept or in the ledger, whatever the order of the list; money adds up."""
    located = pd.DataFrame(
        {
            "deal_id": [f"D{at:02d}" for at in range(len(deals))],
            "security": [f"S{code}" for code, _, _ in deals],
            "position": [position for _, position, _ in deals],
            "deal_value": [value for _, _, value in deals],
        }
    )
    kept, ledger = settle_repeats(located, HEADLINE, policy)
    assert set(kept["deal_id"]) | {entry.deal for entry in ledger.dropped} == set(
        located["deal_id"]
    )
    assert ledger.rows_kept == len(kept)
    assert not kept.duplicated(["security", "position"]).any()
    again, _ = settle_repeats(located.sample(frac=1, random_state=1), HEADLINE, policy)
    pd.testing.assert_frame_equal(
        kept.sort_values("deal_id", ignore_index=True),
        again.sort_values("deal_id", ignore_index=True),
    )
    if policy == "merge":
        assert kept["deal_value"].sum() == pytest.approx(located["deal_value"].sum())


@given(st.lists(st.lists(st.integers(0, 5), max_size=4), min_size=1, max_size=6))
@FEW
def test_ledgers_reconcile(stages: list[list[int]]) -> None:
    """Whatever is dropped, flagged or dropped again: rows in = rows kept + rows dropped."""
    rows, made = 40, []
    for at, numbers in enumerate(stages):
        dropped = [
            LedgerEntry(f"{at}-{number}", "no_prices", Action.DROPPED, "", "")
            for number in dict.fromkeys(numbers)
        ]
        flags = [LedgerEntry("F", "confounded", Action.FLAGGED, "", "") for _ in numbers]
        made.append(StageLedger(f"stage {at}", rows, (*dropped, *flags)))
        rows -= len(dropped)
    ledger = Ledger().then(*made)
    frame = ledger.frame()
    assert ledger.rows_in == ledger.rows_kept + (frame["action"] == "dropped").sum()
    assert len(frame) == sum(len(stage.entries) for stage in made)
    for stage in ledger.stages:
        own = frame[frame["stage"] == stage.stage]
        assert own["deal"].is_monotonic_increasing


def deal_tables() -> st.SearchStrategy[pd.DataFrame]:
    """Deal lists as an analyst might keep them: ids, moments, money with gaps, words."""
    number = st.one_of(st.none(), st.floats(1e-3, 1e6), st.integers(1, 999).map(float))
    row = st.fixed_dictionaries(
        {
            "security": st.sampled_from(["A", "B1", "007"]),
            "exchange": st.just("XLON"),
            "announced_at": st.datetimes(
                min_value=pd.Timestamp("2001-01-01").to_pydatetime(),
                max_value=pd.Timestamp("2024-12-31").to_pydatetime(),
            ).map(lambda moment: moment.replace(microsecond=0, hour=12)),
            "market_value": number,
            "industry": st.sampled_from(["jam", "tin & foil", "Käse", "n/a"]),
        }
    )
    return st.lists(row, min_size=1, max_size=6).map(
        lambda rows: pd.DataFrame(rows).assign(deal_id=[f"D{at}" for at in range(len(rows))])
    )


def read_as(kind: str, deals: pd.DataFrame, folder: Path) -> Tables:
    prices = pd.DataFrame(
        {
            "security": ["A", "B1", "007"],
            "date": pd.to_datetime(["2020-01-02"] * 3),
            "close": [1.25, 2.0, 1e-3],
            "volume": [100.0, np.nan, 7.0],
        }
    )
    level = pd.DataFrame({"exchange": ["XLON"], "date": ["2020-01-02"], "close": [1000.5]})
    write: dict[str, Any] = {
        "csv": lambda table, path: table.to_csv(path, index=False),
        "parquet": lambda table, path: table.to_parquet(path, index=False),
        "xlsx": lambda table, path: table.to_excel(path, index=False),
    }
    sources = {}
    for name, table in (("deals", deals), ("prices", prices), ("benchmarks", level)):
        path = folder / f"{name}.{kind}"
        write[kind](table, path)
        sources[name] = Source(name, path)
    wanted = Wanted(deal_numbers=("market_value",), deal_texts=("industry",))
    return read_inputs(sources, wanted, zone="Europe/London")


@given(deals=deal_tables())
@WITH_FILES
def test_csv_parquet_and_xlsx_are_one_table(deals: pd.DataFrame, tmp_path: Path) -> None:
    """The same rows saved in three ways give the same typed frames."""
    csv = read_as("csv", deals, tmp_path)
    for kind in ("parquet", "xlsx"):
        other = read_as(kind, deals, tmp_path)
        for name in ("deals", "prices", "benchmarks"):
            left, right = getattr(csv, name), getattr(other, name)
            if name == "prices":  # other kinds may keep securities that nobody names
                left, right = (frame.sort_values("security") for frame in (left, right))
                right = right[right["security"].isin(left["security"])]
            pd.testing.assert_frame_equal(
                left.reset_index(drop=True), right.reset_index(drop=True), rtol=1e-14
            )
