"""Which prices leave a table: those that events touch, the same by every way of reading."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pipeline.inputs import market
from pipeline.inputs.files import read_plain
from pipeline.inputs.market import read_prices
from pipeline.inputs.reach import MARGIN, Reach, touched
from pipeline.inputs.source import Only, Source, joined_spans, only

DAYS = pd.date_range("2020-01-01", periods=400)
CODES = ("007", "5", "AB")


def table() -> pd.DataFrame:
    stream = np.random.default_rng(3)
    return pd.DataFrame(
        {
            "security": np.repeat(CODES, len(DAYS)),
            "date": np.tile(DAYS, len(CODES)),
            "close": stream.uniform(1, 200, len(DAYS) * len(CODES)),
            "volume": stream.integers(0, 1000, len(DAYS) * len(CODES)),
        }
    )


def spans(*rows: tuple[str, str, str]) -> pd.DataFrame:
    found = pd.DataFrame(rows, columns=["security", "first", "last"])
    return found.astype({"first": "datetime64[s]", "last": "datetime64[s]"})


SOME = only(
    CODES,
    spans(
        ("007", "2020-03-01", "2020-03-31"),
        ("007", "2020-09-01", "2020-09-10"),
        ("AB", "2019-12-01", "2020-01-02"),
    ),
)


def by_hand(rows: pd.DataFrame, wanted: Only) -> pd.DataFrame:
    assert wanted.spans is not None
    each = rows.merge(wanted.spans, on="security")
    kept = each[each["date"].between(each["first"], each["last"])]
    return kept.sort_values(["security", "date"], ignore_index=True)[list(rows.columns)]


def plainly(rows: pd.DataFrame) -> pd.DataFrame:
    made = rows.assign(security=rows["security"].astype(str)).astype({"close": float})
    return made.sort_values(["security", "date"], ignore_index=True)


def written(folder: Path, kind: str, rows: pd.DataFrame) -> Source:
    path = folder / f"prices.{kind}"
    if kind == "csv":
        rows.to_csv(path, index=False)
    else:
        rows.to_parquet(path, index=False)
    return Source("prices", path)


@pytest.mark.parametrize("kind", ["csv", "parquet"])
@pytest.mark.parametrize("shuffled", [False, True])
def test_both_ways_of_reading_give_the_rows_in_the_spans(
    kind: str, shuffled: bool, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    rows = table().sample(frac=1, random_state=1) if shuffled else table()
    source = written(tmp_path, kind, rows)
    fast, said = read_prices(source, SOME, "")
    assert isinstance(fast["security"].dtype, pd.CategoricalDtype)
    monkeypatch.setattr(market, "read_plain", lambda *_: None)
    slow, also = read_prices(source, SOME, "")
    assert said == also == []
    expected = by_hand(table(), SOME)
    for found in (fast, slow):
        pd.testing.assert_frame_equal(plainly(found), plainly(expected), check_dtype=False)


@pytest.mark.parametrize(
    ("column", "cell"),
    [
        ("close", "1_5"), ("close", "inf"), ("close", "n/a"), ("close", "-3"), ("close", "1,5"),
        ("date", "2020-03-05 16:00"), ("date", "05.03.2020"), ("date", ""), ("volume", "many"),
    ],
)  # fmt: skip
def test_a_doubtful_cell_is_never_read_the_fast_way(column: str, cell: str, tmp_path: Path) -> None:
    rows = table().astype(str)
    rows.loc[64, column] = cell
    source = written(tmp_path, "csv", rows)
    plain = read_plain(source, "close", SOME, "")
    assert plain is None or (plain["close"] <= 0).any()
    _, said = read_prices(source, SOME, "")
    assert said or cell == "n/a"
    assert all("66" in finding.row for finding in said)


def test_a_doubt_outside_the_spans_is_not_met(tmp_path: Path) -> None:
    rows = table().astype(str)
    rows.loc[300, "close"] = "oops"
    source = written(tmp_path, "csv", rows)
    assert read_prices(source, SOME, "")[1] == []
    assert read_prices(source, only(CODES), "")[1] != []


def test_two_closes_of_one_date(tmp_path: Path) -> None:
    rows = pd.concat([table(), table().iloc[[64]].assign(close=1.0)])
    (finding,) = read_prices(written(tmp_path, "parquet", rows), SOME, "")[1]
    assert (finding.rule, finding.row) == ("conflicting_price", "66, 1202")


@pytest.mark.parametrize("date_format", ["%d/%m/%Y", "%Y%m%d"])
def test_dates_of_a_declared_format(date_format: str, tmp_path: Path) -> None:
    rows = table()
    written_so = rows.assign(date=rows["date"].dt.strftime(date_format))
    source = written(tmp_path, "csv", written_so)
    assert read_plain(source, "close", SOME, date_format) is not None
    found, said = read_prices(source, SOME, date_format)
    assert said == []
    assert plainly(found)["date"].tolist() == by_hand(rows, SOME)["date"].tolist()


def test_codes_are_compared_as_they_are_read(tmp_path: Path) -> None:
    """Spaces around, and 5.0 for 5; the code 007 stays apart from 7."""
    rows = table()
    rows["security"] = rows["security"].map({"007": " 007 ", "5": "5.0", "AB": "7"})
    wanted = only(["007", "5"], spans(("007", "2020-01-01", "2020-01-03"),
                                      ("5", "2020-02-01", "2020-02-02")))  # fmt: skip
    found, _ = read_prices(written(tmp_path, "csv", rows), wanted, "")
    assert found["security"].astype(str).tolist() == ["007"] * 3 + ["5"] * 2


@pytest.mark.parametrize("name", ["code", "first", "number", "wanted", "codes", "day"])
def test_whatever_the_columns_are_called(
    name: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Names that the statements use themselves."""
    expected = plainly(by_hand(table(), SOME))
    for ours in ("security", "date"):
        source = written(tmp_path, "parquet", table().rename(columns={ours: name}))
        source = Source("prices", source.path, {ours: name})
        assert read_plain(source, "close", SOME, "") is not None
        with monkeypatch.context() as slow:
            slow.setattr(market, "read_plain", lambda *_: None)
            found, _ = read_prices(source, SOME, "")
        pd.testing.assert_frame_equal(plainly(found), expected, check_dtype=False)
        pd.testing.assert_frame_equal(
            plainly(read_prices(source, SOME, "")[0]), expected, check_dtype=False
        )


DATES = st.dates(pd.Timestamp("2019-01-01").date(), pd.Timestamp("2021-12-31").date())
SPANS = st.lists(
    st.tuples(st.sampled_from(CODES), DATES, st.integers(0, 90)), min_size=1, max_size=12
)


@settings(max_examples=50, deadline=None)
@given(SPANS)
def test_joined_spans_hold_the_same_dates_once(drawn: list[tuple[str, object, int]]) -> None:
    made = pd.DataFrame(drawn, columns=["security", "first", "days"])
    made["first"] = pd.to_datetime(made["first"]).astype("datetime64[s]")
    made["last"] = made["first"] + pd.to_timedelta(made["days"], unit="D")
    joined = joined_spans(made[["security", "first", "last"]])

    def dates(frame: pd.DataFrame) -> list[tuple[str, pd.Timestamp]]:
        return [
            (row.security, day)
            for row in frame.itertuples()
            for day in pd.date_range(row.first, row.last)
        ]

    assert len(dates(joined)) == len(set(dates(joined)))
    assert set(dates(joined)) == set(dates(made))
    rows = table().astype({"date": "datetime64[s]"})
    inside = Only(CODES, joined).within(rows)
    kept = set(zip(inside["security"], inside["date"], strict=True))
    assert kept == set(dates(made)) & set(zip(rows["security"], rows["date"], strict=True))


def test_reach_goes_around_announcements_rumours_and_candidates() -> None:
    day = pd.Timestamp("2020-06-01").as_unit("s")
    deals = pd.DataFrame(
        {
            "security": ["A", "B", "C"],
            "announced_date": [day, day, pd.NaT],
            "rumoured_date": [day - pd.Timedelta(days=400), pd.NaT, pd.NaT],
        }
    )
    candidates = pd.DataFrame(
        {"security": ["B", "D"], "as_of": [day - pd.Timedelta(days=700), day]}
    )
    lines = pd.DataFrame({"security": ["A"], "line": ["A2"]})
    found = touched(Reach(100, 10, 40, ""), deals, candidates, None, lines)
    assert found is not None
    assert found.codes == ("A", "A2", "B", "C", "D")
    spans = found.spans
    assert spans is not None
    assert spans["security"].tolist() == ["A", "A", "A2", "A2", "B", "B", "D"]
    announced = spans.iloc[1]
    assert (day - announced["first"]).days == int(100 * 365 / 235) + MARGIN
    assert (announced["last"] - day).days == int(10 * 365 / 235) + MARGIN
    everything = touched(Reach(whole="asked for"), deals, candidates, None, None)
    assert everything is not None
    assert everything.spans is None
