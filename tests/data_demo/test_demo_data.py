"""The demo data: stable bytes, planted irregularities, stated truth and no leak of hidden parts.

Closing hours and closures below are the exchanges' published ones, written from memory.
"""

from __future__ import annotations

import importlib
import json
import subprocess
import sys
from dataclasses import asdict, dataclass
from datetime import date, time
from pathlib import Path
from types import ModuleType
from typing import Any

import numpy as np
import pandas as pd
import pandas_market_calendars as calendars
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

ROOT = Path(__file__).resolve().parents[2]
FOLDER = ROOT / "data_demo"
PARQUETS = ("prices", "benchmarks", "factors", "candidates")
FILES = ("deals.xlsx", "truth.json", *(f"{name}.parquet" for name in PARQUETS))
# Zone, currency, regular close, the library's own rule set (not the one the script uses) and a
# published closure: a day of mourning, a bank holiday, a ten-day holiday, Midsummer Eve.
VENUES = {
    "XNYS": ("America/New_York", "USD", time(16, 0), "NYSE", "2018-12-05"),
    "XLON": ("Europe/London", "GBP", time(16, 30), "LSE", "2022-09-19"),
    "XTKS": ("Asia/Tokyo", "JPY", time(15, 0), "JPX", "2019-05-01"),
    "XSTO": ("Europe/Stockholm", "SEK", time(17, 30), "XSTO", "2019-06-21"),
}
COLUMNS = {
    "deals": "deal_id security exchange announced_at timestamp_zone deal_value market_value "
    "currency industry year paid_in_shares treasury_shares fast_placement target_listed "
    "cross_border leverage cash earnings_release status",
    "prices": "security date close volume",
    "benchmarks": "exchange date close",
    "factors": "exchange date market_excess size value momentum risk_free",
    "candidates": "security exchange industry year as_of market_value leverage cash "
    "divisions_for_sale announced deal_id",
}
Row = dict[str, Any]
Worlds = tuple[Any, Any]


def place(dates: pd.DatetimeIndex, day: object) -> int:
    """Position of a day among sessions, -1 if it is none."""
    return int(dates.get_indexer(pd.DatetimeIndex([pd.Timestamp(str(day))]).normalize())[0])


def regular_close(exchange: str, day: date) -> time:
    """Regular local closing time; Tokyo trades half an hour longer from 5 November 2024."""
    if exchange == "XTKS" and day >= date(2024, 11, 5):
        return time(15, 30)
    return VENUES[exchange][2]


@dataclass(frozen=True, slots=True)
class Demo:
    """The committed files (doubled deal dropped) and their dates by exchange and security."""

    raw_deals: pd.DataFrame
    deals: list[Row]
    frames: dict[str, pd.DataFrame]
    truth: Row
    sessions: dict[str, pd.DatetimeIndex]
    own: dict[str, pd.DatetimeIndex]

    def defects(self, kind: str) -> list[Row]:
        return [d for d in self.truth["defects"] if d["kind"] == kind]

    def deal(self, defect: Row) -> Row:
        return next(d for d in self.deals if d["deal_id"] == defect["deal_id"])

    def sessions_of(self, defect: Row) -> pd.DatetimeIndex:
        return self.sessions[self.deal(defect)["exchange"]]

    def event(self, deal: Row) -> int:
        """Position of the event session, worked out from the stamp alone."""
        stamp, sessions = deal["announced_at"], self.sessions[deal["exchange"]]
        moment = pd.Timestamp(stamp)
        closed = moment.time() > regular_close(deal["exchange"], moment.date())
        late = len(stamp) > 10 and closed and place(sessions, stamp) >= 0
        return int(sessions.searchsorted(moment.normalize())) + int(late)


@pytest.fixture(scope="module")
def demo() -> Demo:
    raw = pd.read_excel(FOLDER / "deals.xlsx", sheet_name="deals")
    frames = {name: pd.read_parquet(FOLDER / f"{name}.parquet") for name in PARQUETS}
    for frame in frames.values():
        for column in frame.columns.intersection(["date", "as_of"]):
            frame[column] = pd.to_datetime(frame[column])
    frames["deals"] = raw.drop_duplicates(ignore_index=True)
    rows = [{str(k): v for k, v in r.items()} for r in frames["deals"].to_dict("records")]
    truth = json.loads((FOLDER / "truth.json").read_text(encoding="utf-8"))
    dates = [
        {str(k): pd.DatetimeIndex(g) for k, g in frames[name].groupby(by)["date"]}
        for name, by in (("benchmarks", "exchange"), ("prices", "security"))
    ]
    return Demo(raw, rows, frames, truth, *dates)


@pytest.fixture(scope="module")
def script() -> ModuleType:
    sys.path.insert(0, str(FOLDER))
    return importlib.import_module("make_demo")


@pytest.fixture(scope="module")
def runs(script: ModuleType, tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Path]:
    first, second = tmp_path_factory.mktemp("first"), tmp_path_factory.mktemp("second")
    command = [sys.executable, "data_demo/make_demo.py", "--out", str(first)]
    subprocess.run(command, check=True, cwd=ROOT)
    assert script.main(["--out", str(second)]) == 0
    return first, second


@pytest.fixture(scope="module")
def worlds(script: ModuleType) -> Worlds:
    usual, seed = script.Parameters(), script.DEFAULT_SEED
    return script.simulate(usual, seed), script.simulate(script.weakened(usual), seed)


def test_two_runs_give_the_same_bytes(runs: tuple[Path, Path]) -> None:
    first, second = runs
    assert sorted(p.name for p in first.iterdir()) == sorted(FILES)
    for name in FILES:
        assert (first / name).read_bytes() == (second / name).read_bytes(), name


def test_committed_files_equal_a_fresh_run(runs: tuple[Path, Path], demo: Demo) -> None:
    pd.testing.assert_frame_equal(demo.raw_deals, pd.read_excel(runs[0] / "deals.xlsx"))
    assert (FOLDER / "truth.json").read_bytes() == (runs[0] / "truth.json").read_bytes()
    for name in PARQUETS:
        old, new = (folder / f"{name}.parquet" for folder in (FOLDER, runs[0]))
        pd.testing.assert_frame_equal(pd.read_parquet(old), pd.read_parquet(new))
        # Bytes can only be compared when the same pyarrow wrote both.
        if pq.ParquetFile(old).metadata.created_by.split()[-1] == pa.__version__:
            assert old.read_bytes() == new.read_bytes(), name


def test_folder_size_columns_and_storage_types(demo: Demo) -> None:
    paths = [p for p in FOLDER.rglob("*") if p.is_file() and "__pycache__" not in p.parts]
    assert sum(p.stat().st_size for p in paths) <= 10_000_000
    for name, columns in COLUMNS.items():
        assert list(demo.frames[name].columns) == columns.split(), name
    for name in PARQUETS:
        stored = pq.ParquetFile(FOLDER / f"{name}.parquet")
        schema, group = stored.schema_arrow, stored.metadata.row_group(0)
        assert {group.column(k).compression for k in range(len(schema))} == {"ZSTD"}
        dates = [f.type for f in schema if f.name in ("date", "as_of")]
        assert dates == [pa.date32()]
    assert pq.read_schema(FOLDER / "prices.parquet").field("volume").type == pa.int64()


def test_counts_and_ranges(demo: Demo) -> None:
    deals, candidates = demo.frames["deals"], demo.frames["candidates"]
    assert set(candidates["security"]) == {f"C{k:03d}" for k in range(1, 301)} == set(demo.own)
    assert len(candidates.drop_duplicates(["security", "year"])) == len(candidates) == 3000
    assert set(candidates["year"]) == set(range(2015, 2025))
    assert 465 <= len(deals) <= 495
    assert 0.40 <= deals["paid_in_shares"].mean() <= 0.45
    assert (deals["deal_value"] / deals["market_value"]).between(0.005, 2.0).all()
    assert (abs(deals[["leverage", "cash"]] - 0.5) <= 0.5).all(axis=None)
    assert (deals["treasury_shares"] == 0).mean() > 0.5
    assert set(deals["status"]) == {"completed", "withdrawn"}
    assert 5 <= (deals["status"] == "withdrawn").sum() <= 40
    for row in demo.deals:
        assert (row["timestamp_zone"], row["currency"]) == (VENUES[row["exchange"]][0], "USD")
        assert int(row["announced_at"][:4]) == row["year"]


def test_candidates_and_deals_name_the_same_company_years(demo: Demo) -> None:
    deals, candidates = demo.frames["deals"], demo.frames["candidates"]
    announced = candidates[candidates["announced"] == 1]
    assert (candidates.loc[candidates["announced"] == 0, "deal_id"] == "").all()
    firsts = deals.sort_values("announced_at").drop_duplicates(["security", "year"])
    shared = ["security", "year", "exchange", "industry", "leverage", "cash", "deal_id"]
    pair = [f[shared].sort_values("deal_id", ignore_index=True) for f in (announced, firsts)]
    pd.testing.assert_frame_equal(pair[0], pair[1])
    for (exchange, year), rows in candidates.groupby(["exchange", "year"]):
        sessions = demo.sessions[str(exchange)]
        assert set(rows["as_of"]) == {sessions[sessions.year == year][0]}


@pytest.mark.parametrize("exchange", sorted(VENUES))
def test_rows_fall_on_the_sessions_of_the_exchange(demo: Demo, exchange: str) -> None:
    zone, _, _, name, closed = VENUES[exchange]
    schedule = calendars.get_calendar(name).schedule("2013-12-02", "2025-02-28")
    expected = pd.DatetimeIndex(schedule.index)
    assert place(expected, closed) == -1
    assert demo.sessions[exchange].equals(expected)
    factors = demo.frames["factors"]
    assert pd.DatetimeIndex(factors.loc[factors["exchange"] == exchange, "date"]).equals(expected)
    kinds = ("untraded_stretch", "short_history", "delisting_inside_window")
    disturbed = {demo.defects(k)[0]["security"] for k in kinds}
    candidates = demo.frames["candidates"]
    for security in candidates.loc[candidates["exchange"] == exchange, "security"].unique():
        assert demo.own[security].equals(expected) == (security not in disturbed), security
    # Shortened sessions carry no stamp, so the regular closing hours decide every one.
    hours = schedule["market_close"].dt.tz_convert(zone).dt.hour
    short = {str(d.date()) for d in expected[(hours < 14).to_numpy()]}
    assert exchange == "XTKS" or len(short) > 20
    stamps = [d["announced_at"] for d in demo.deals if d["exchange"] == exchange]
    assert not short & {s[:10] for s in stamps if len(s) > 10}


def test_stamps_and_event_sessions_are_those_the_truth_lists(demo: Demo) -> None:
    kinds = {"after_close": 96, "weekend": 12, "exchange_holiday": 5, "date_only": 25}
    found: dict[str, list[str]] = {kind: [] for kind in kinds}
    for row in demo.deals:
        stamp, exchange = row["announced_at"], row["exchange"]
        moment = pd.Timestamp(stamp)
        if len(stamp) == 10:
            found["date_only"].append(row["deal_id"])
        elif moment.day_of_week >= 5:
            found["weekend"].append(row["deal_id"])
        elif place(demo.sessions[exchange], stamp) < 0:
            found["exchange_holiday"].append(row["deal_id"])
            assert any(place(other, stamp) >= 0 for other in demo.sessions.values())
        elif moment.time() > regular_close(exchange, moment.date()):
            found["after_close"].append(row["deal_id"])
    assert {kind: len(ids) for kind, ids in found.items()} == kinds
    for kind, ids in found.items():
        assert ids == [d["deal_id"] for d in demo.defects(kind)], kind
    for defect in demo.truth["defects"]:
        deal = demo.deal(defect)
        assert place(demo.sessions_of(defect), defect["event_session"]) == demo.event(deal)
        for name in ("announced_at", "security"):
            assert defect[name] == deal[name]


def test_untraded_stretch(demo: Demo) -> None:
    (defect,) = demo.defects("untraded_stretch")
    sessions = demo.sessions_of(defect)
    missing = sessions.difference(demo.own[defect["security"]])
    assert str(missing[0].date()) == defect["first_missing"]
    assert str(missing[-1].date()) == defect["last_missing"]
    offsets = sessions.get_indexer(missing) - place(sessions, defect["event_session"])
    assert offsets.size >= 15
    assert (np.diff(offsets) == 1).all()
    assert -250 < offsets[0] < offsets[-1] <= -31


def test_short_history_and_delisting(demo: Demo) -> None:
    (short,), (gone,) = demo.defects("short_history"), demo.defects("delisting_inside_window")
    for defect, end, name, offset in ((short, 0, "first_row", -60), (gone, -1, "last_row", 1)):
        sessions, row = demo.sessions_of(defect), demo.own[defect["security"]][end]
        assert place(sessions, row) - place(sessions, defect["event_session"]) == offset
        assert str(row.date()) == defect[name]


def test_one_pair_within_a_fortnight_and_one_doubled_row(demo: Demo) -> None:
    (pair,) = demo.defects("two_deals_within_fortnight")
    deals = demo.frames["deals"]
    deals = deals.assign(day=pd.to_datetime(deals["announced_at"].str[:10]))
    deals = deals.sort_values(["security", "day"])
    gap = deals.groupby("security")["day"].diff().dt.days
    assert deals.loc[gap <= 14, "deal_id"].tolist() == [pair["other_deal_id"]]
    both = deals[deals["deal_id"].isin([pair["deal_id"], pair["other_deal_id"]])]
    assert both["security"].nunique() == both["year"].nunique() == 1
    assert deals.duplicated(["security", "year"]).sum() == 1
    (defect,) = demo.defects("duplicate_row")
    assert demo.raw_deals.loc[demo.raw_deals.duplicated(), "deal_id"].item() == defect["deal_id"]
    assert deals["deal_id"].is_unique


def test_earnings_releases_near_the_announcement(demo: Demo) -> None:
    near = {}
    for row in demo.deals:
        release = place(demo.sessions[row["exchange"]], row["earnings_release"])
        assert release >= 0
        if abs(release - demo.event(row)) <= 1:
            near[row["deal_id"]] = row["earnings_release"]
    listed = demo.defects("earnings_within_one_session")
    assert near == {d["deal_id"]: d["earnings_release"] for d in listed}
    assert len(near) == 10


def test_one_unadjusted_split(demo: Demo) -> None:
    (defect,) = demo.defects("unadjusted_split")
    prices, sessions = demo.frames["prices"], demo.sessions_of(defect)
    moves = prices.groupby("security")["close"].pct_change()
    halved = prices[moves < -0.35]
    assert halved["security"].tolist() == [defect["security"]]
    assert moves[halved.index[0]] == pytest.approx(-0.5, abs=0.04)
    split = place(sessions, halved["date"].iloc[0])
    assert split == place(sessions, defect["first_split_row"])
    assert -250 < split - place(sessions, defect["event_session"]) <= -31
    benchmarks = demo.frames["benchmarks"]
    own = benchmarks["exchange"] == demo.deal(defect)["exchange"]
    assert abs(benchmarks.loc[own, "close"].pct_change().to_numpy()[split]) < 0.03


def test_truth_states_the_parameters_of_the_script(script: ModuleType, demo: Demo) -> None:
    stated = demo.truth["parameters"]
    assert stated == json.loads(json.dumps(asdict(script.Parameters())))
    assert (demo.truth["seed"], demo.truth["deals"]) == (script.DEFAULT_SEED, len(demo.deals))
    assert stated["effect_shares"] == -0.0080
    assert stated["day_split"] == [0.15, 0.60, 0.25]
    assert any("picked for legibility" in note for note in demo.truth["notes"])
    assert len({d["kind"] for d in demo.truth["defects"]}) == 11


def test_factors_add_up_to_the_benchmark(demo: Demo) -> None:
    factors, benchmarks = demo.frames["factors"], demo.frames["benchmarks"]
    assert factors["exchange"].equals(benchmarks["exchange"])
    total = factors["market_excess"] + factors["risk_free"]
    returns = benchmarks.groupby("exchange")["close"].pct_change()
    assert returns.isna().sum() == 4
    np.testing.assert_allclose(returns.dropna(), total[returns.notna()], atol=2e-7)


def test_planted_effects_sit_on_the_event_session(demo: Demo) -> None:
    moved = {d["deal_id"] for k in ("after_close", "weekend") for d in demo.defects(k)}
    prices, levels = demo.frames["prices"], demo.frames["benchmarks"]
    own = {str(k): g.to_numpy() for k, g in prices.groupby("security")["close"]}
    market = {str(k): g.to_numpy() for k, g in levels.groupby("exchange")["close"]}
    squares = []
    for row in (d for d in demo.deals if d["deal_id"] in moved):
        at = demo.event(row)
        here = place(demo.own[row["security"]], demo.sessions[row["exchange"]][at])
        asset = np.diff(np.log(own[row["security"]][here - 11 : here + 1]))
        squares.append((asset - np.diff(np.log(market[row["exchange"]][at - 11 : at + 1]))) ** 2)
    mean = np.mean(squares, axis=0)
    assert mean[-1] > 2.0 * mean[:9].mean()
    assert mean[-2] < 1.5 * mean[:9].mean()


def test_no_column_leaks_the_hidden_parts(demo: Demo, worlds: Worlds) -> None:
    years, plan = worlds[0].years, worlds[0].plan
    hidden = years.overvaluation[plan.company, plan.year]
    signal = years.signal.ravel()
    deals, candidates = (demo.frames[n].select_dtypes("number") for n in ("deals", "candidates"))
    pairs = [(deals, hidden), (candidates, years.overvaluation.ravel()), (candidates, signal)]
    for frame, values in pairs:
        observed = frame.drop(columns=["paid_in_shares", "announced"], errors="ignore")
        for name, column in observed.items():
            # Six standard errors of a zero correlation, so that chance does not decide.
            assert abs(np.corrcoef(column, values)[0, 1]) < 6.0 / np.sqrt(len(column)), name
    # The hidden parts do work where they should.
    assert np.corrcoef(deals["paid_in_shares"], hidden)[0, 1] > 0.3
    assert np.corrcoef(candidates["announced"], signal)[0, 1] > 0.3


def test_noise_of_one_industry_moves_together(worlds: Worlds) -> None:
    world, firms = worlds[0], worlds[0].companies
    noise = world.returns - firms.beta[:, None] * world.factors.benchmark[firms.exchange]
    noise -= (firms.loadings[:, None, :] * world.factors.style[firms.exchange]).sum(axis=2)
    links = np.corrcoef(noise[:, world.grid.is_open.all(axis=0)])
    same = firms.industry[:, None] == firms.industry[None, :]
    assert 0.035 < links[same & ~np.eye(300, dtype=bool)].mean() < 0.065
    assert abs(links[~same].mean()) < 0.01


def effective_f(deals: pd.DataFrame) -> float:
    """Effective first-stage F of Montiel Olea and Pflueger (2013), heteroskedasticity-robust."""
    size = np.log(deals["deal_value"] / deals["market_value"])
    groups = pd.get_dummies(deals[["industry", "year"]].astype(str), dtype=float, drop_first=True)
    controls = np.column_stack([np.ones(len(deals)), size, deals["leverage"], groups])
    stacked = deals[["paid_in_shares", "treasury_shares", "fast_placement"]].to_numpy(float)
    stacked = stacked - controls @ np.linalg.lstsq(controls, stacked, rcond=None)[0]
    d, z = stacked[:, 0], stacked[:, 1:]
    inverse = np.linalg.inv(z.T @ z)
    scores = z * (d - z @ (inverse @ (z.T @ d)))[:, None]
    return float(d @ z @ inverse @ z.T @ d / np.trace(inverse @ (scores.T @ scores)))


def test_weak_variant_alters_payment_alone(script: ModuleType, demo: Demo, worlds: Worlds) -> None:
    usual, weak = worlds
    changed = weak.in_shares.astype(int) - usual.in_shares.astype(int)
    assert (changed != 0).sum() > 50
    # Payment moves the effect by the true amount and the instruments by nothing else.
    np.testing.assert_allclose(weak.effects - usual.effects, -0.0080 * changed, atol=2e-8)
    frames = script.tables(script.weakened(script.Parameters()), weak)
    deals, committed = frames["deals"].drop_duplicates(ignore_index=True), demo.frames["deals"]
    same = [c for c in deals.columns if c != "paid_in_shares"]
    pd.testing.assert_frame_equal(deals[same], committed[same], check_dtype=False)
    candidates = demo.frames["candidates"]
    pd.testing.assert_frame_equal(frames["candidates"], candidates, check_dtype=False)
    prices = demo.frames["prices"]
    differs = frames["prices"]["close"].to_numpy() != prices["close"].to_numpy()
    assert set(prices.loc[differs, "security"]) == set(deals.loc[changed != 0, "security"])
    assert 70.0 < effective_f(committed) < 120.0
    assert effective_f(deals) < 5.0


@pytest.mark.parametrize("options", [["--weak-instruments"], ["--seed", "7"], ["--seed", "-1"]])
def test_variants_never_overwrite_standard_files(script: ModuleType, options: list[str]) -> None:
    before = (FOLDER / "truth.json").stat().st_mtime_ns
    with pytest.raises(SystemExit) as stop:
        script.main(options)
    assert stop.value.code == 2
    assert (FOLDER / "truth.json").stat().st_mtime_ns == before
