"""Which events count: from the study's key to ledger, tables and page, on an invented study."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from typer.testing import CliRunner

from pipeline.cli import app
from pipeline.core.findings import InputProblem
from pipeline.core.results import Results
from pipeline.flow import run
from pipeline.report.content import report
from pipeline.report.numerals import lines
from pipeline.study.load import load_study
from tests.small import write_small_study

Change = Callable[[pd.DataFrame], pd.DataFrame]
COLUMN = 'columns = ["ols"]'


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    write_small_study(tmp_path)
    return tmp_path


def change(folder: Path, how: Change, **tables: pd.DataFrame) -> None:
    """Change the deal list, and add tables and their keys to the study."""
    path = folder / "deals.csv"
    how(pd.read_csv(path, dtype=str, keep_default_na=False)).to_csv(path, index=False)
    study = (folder / "study.toml").read_text()
    for name, table in tables.items():
        table.to_csv(folder / f"{name}.csv", index=False)
        study = study.replace("[event_time]", f'{name} = "{name}.csv"\n\n[event_time]', 1)
    (folder / "study.toml").write_text(study)


def results(folder: Path, **event_time: object) -> Results:
    overrides = {"event_time": event_time} if event_time else {}
    return run(load_study(folder / "study.toml", overrides))[0]


def told(found: Results, rule: str) -> pd.DataFrame:
    ledger = found.ledger.frame()
    return ledger[ledger["rule"] == rule]


def headline(found: Results) -> float:
    return found.headline.mean


def set_cells(column: str, **cells: str) -> Change:
    """A column with these cells for the deals named, empty for the others."""

    def how(deals: pd.DataFrame) -> pd.DataFrame:
        old = deals.get(column, "")
        return deals.assign(**{column: deals["deal_id"].map(cells).fillna(old)})

    return how


def dates_of(folder: Path) -> pd.Series:
    deals = pd.read_csv(folder / "deals.csv", dtype=str)
    return pd.to_datetime(deals.set_index("deal_id")["announced_at"].str[:10])


def test_a_rumour_is_shown_under_either_date(folder: Path) -> None:
    dates = dates_of(folder)
    early = {
        deal: f"{dates[deal] - pd.tseries.offsets.BusinessDay(4):%Y-%m-%d} 09:00"
        for deal in ("D03", "D07", "D11")
    }
    change(folder, set_cells("rumoured_at", **early))
    announced, first = results(folder), results(folder, day_zero="earliest")
    for found in (announced, first):
        assert told(found, "rumour_before")["deal"].tolist() == ["D03", "D07", "D11"]
        assert found.readings["changed"].tolist() == [0, 3]
        assert found.readings["mean"].iloc[0] == pytest.approx(headline(found))
        assert found.readings["p_value"].notna().all()
        row = found.sensitivity[found.sensitivity["dimension"] == "day zero"]
        assert row["estimate"].tolist() == pytest.approx([found.readings["mean"].iloc[1]])
        names = [table.name for table in report(found).tables]
        assert "readings" in names
    assert headline(announced) != headline(first)
    assert announced.readings["mean"].iloc[1] == pytest.approx(headline(first), rel=1e-9)
    assert first.readings["mean"].iloc[1] == pytest.approx(headline(announced), rel=1e-9)
    assert any("rumour is taken for the announcement" in note for note in first.study.notes)


@pytest.fixture
def with_news(folder: Path) -> Path:
    dates = dates_of(folder)
    rows = [("S03", dates["D03"] + pd.tseries.offsets.BusinessDay(1), "guidance"),
            ("S05", dates["D05"], "dividend")]  # fmt: skip
    news = pd.DataFrame(rows, columns=["security", "date", "kind"])
    change(folder, lambda deals: deals, news=news.assign(date=news["date"].dt.strftime("%Y-%m-%d")))
    return folder


def test_other_news_is_flagged_excluded_or_parted(with_news: Path) -> None:
    found = {key: results(with_news, confounding=key) for key in ("flag", "exclude", "dummy")}
    assert {key: item.headline.n for key, item in found.items()} == {
        "flag": 40, "exclude": 38, "dummy": 39,
    }  # fmt: skip
    for item in found.values():
        assert told(item, "other_news")["deal"].tolist() == ["D03", "D05"]
    assert told(found["flag"], "other_news")["action"].tolist() == ["flagged"] * 2
    assert told(found["exclude"], "other_news")["action"].tolist() == ["dropped"] * 2
    assert told(found["dummy"], "other_news")["action"].tolist() == ["changed", "dropped"]
    without = found["flag"].sensitivity.query("variant == 'without deals next to other news'")
    assert without["estimate"].tolist() == pytest.approx([headline(found["exclude"])])
    daily = found["flag"].tables["abnormal_returns"]
    out = daily[(daily["deal"] == "D03") & (daily["day"] == 1)]["abnormal_return"].iloc[0]
    cars = {key: item.deals.set_index("deal")["car_m1_1"] for key, item in found.items()}
    assert cars["dummy"]["D03"] == pytest.approx(cars["flag"]["D03"] - out, rel=1e-9)
    assert cars["dummy"]["D04"] == pytest.approx(cars["flag"]["D04"], rel=1e-12)


def second_deals(folder: Path) -> None:
    """D01 becomes a deal of D00's company two sessions later, D02 one of the same session."""

    def how(deals: pd.DataFrame) -> pd.DataFrame:
        first = pd.Timestamp(deals["announced_at"].iloc[0][:10])
        later = first + pd.tseries.offsets.BusinessDay(1)
        deals.loc[[1, 2], "security"] = "S00"
        deals.loc[1, "announced_at"] = f"{later:%Y-%m-%d} 10:00"
        deals.loc[2, "announced_at"] = deals.loc[0, "announced_at"]
        deals["deal_value"] = "5"
        deals.loc[[0, 1, 2], "deal_value"] = ["10", "70", "30"]
        deals.loc[[0, 1, 2], "shares"] = ["0", "1", "0"]
        return deals

    change(folder, how)


@pytest.mark.parametrize(
    ("policy", "kept", "lost"),
    [
        ("keep_first", ["D02"], {"D00": "overlapping_event", "D01": "overlapping_event"}),
        ("merge", ["D02"], {"D00": "merged_event", "D01": "merged_event"}),
        ("keep_all", ["D01", "D02"], {"D00": "overlapping_event"}),
    ],
)
def test_repeated_deals(folder: Path, policy: str, kept: list[str], lost: dict[str, str]) -> None:
    second_deals(folder)
    found = results(folder, repeats=policy)
    deals = found.deals.set_index("deal")
    assert sorted(set(deals.index) & {"D00", "D01", "D02"}) == kept
    frame = found.ledger.frame()
    dropped = frame[(frame["stage"] == "repeated deals") & (frame["action"] == "dropped")]
    assert dict(zip(dropped["deal"], dropped["rule"], strict=True)) == lost
    assert found.ledger.rows_in == 40
    if policy == "merge":
        assert float(deals.loc["D02", "shares"]) == 1
        assert "deal value together 110" in told(found, "merged_event")["value"].iloc[-1]
    clusters = found.columns[0].clusters  # type: ignore[union-attr]
    assert ("security" in clusters) == (policy == "keep_all")
    assert any("clustered by company" in note for note in found.study.notes) == (
        policy == "keep_all"
    )


def test_one_side_of_the_deals(folder: Path) -> None:
    def both(deals: pd.DataFrame) -> pd.DataFrame:
        other = deals.assign(side="target", security="S39")
        return pd.concat([deals.assign(side="acquirer"), other])

    alone = headline(results(folder))
    change(folder, both)
    with pytest.raises(InputProblem) as caught:
        results(folder)
    assert [finding.rule for finding in caught.value.findings] == ["side_not_named"]
    found = results(folder, side="acquirer")
    assert headline(found) == pytest.approx(alone, rel=1e-12)
    assert len(told(found, "other_side")) == 40


def listed_twice(folder: Path) -> pd.DataFrame:
    """Company S00 under two codes: its own prices, and copies that trade less and move more."""
    prices = pd.read_csv(folder / "prices.csv")
    own = prices[prices["security"] == "S00"]
    noise = np.exp(np.random.default_rng(3).normal(0, 0.02, len(own)))
    thin = own.assign(security="S00.B", close=own["close"] * noise, volume=10)
    prices["security"] = prices["security"].replace({"S00": "S00.A"})
    pd.concat([prices, thin]).to_csv(folder / "prices.csv", index=False)
    return pd.DataFrame(
        {"security": "S00", "line": ["S00.B", "S00.A"], "exchange": "XLON", "currency": "GBP"}
    )


def test_the_listing_that_trades_most_and_the_other_beside_it(folder: Path) -> None:
    alone = headline(results(folder))
    change(folder, lambda deals: deals, listings=listed_twice(folder))
    found = results(folder, second_lines=True)
    assert headline(found) == pytest.approx(alone, rel=1e-12)
    (entry,) = told(found, "line_chosen").to_dict("records")
    assert entry["deal"] == "D00"
    assert entry["value"].startswith("S00.A on XLON: highest median turnover")
    assert found.readings["reading"].tolist()[1].startswith("on the second listing")
    assert found.readings["changed"].tolist() == [0, 1]
    assert found.readings["mean"].iloc[1] != pytest.approx(alone)
    assert results(folder).readings.empty


def test_the_report_explains_day_zero(folder: Path) -> None:
    change(folder, set_cells("announced_at", D03="2019-03-16 11:00", D04="2019-03-15"))
    found = results(folder)
    tables = {table.name: table for table in report(found).tables}
    kinds = {row[0].text: int(row[1].value) for row in tables["day_zero_kinds"].rows}  # type: ignore[union-attr]
    assert kinds == {"During the session": 38, "Date only": 1, "On a day without trading": 1}
    every = tables["day_zero"]
    assert len(every.rows) == 40
    assert every.shortened
    row = next(row for row in every.rows if lines(row[0]) == ("D03",))
    assert [line for cell in row for line in lines(cell)] == [
        "D03", "XLON", "2019-03-16 11:00", "On a day without trading", "2019-03-18", "16:30",
        "Public 2019-03-16 11:00 (Europe/London), a weekend or holiday of XLON; the close of "
        "2019-03-18 at 16:30 is the first to hold it.",
    ]  # fmt: skip
    assert "readings" not in tables


def test_a_restricted_company_stops_every_command(folder: Path) -> None:
    """An exit code of its own, nothing written, and the words defer to compliance."""
    change(folder, lambda deals: deals, restricted=pd.DataFrame({"security": ["S07"]}))
    out = folder / "out"
    for command in (["run", "--out", str(out)], ["check"]):
        found = CliRunner().invoke(app, [command[0], str(folder / "study.toml"), *command[1:]])
        assert found.exit_code == 3
        assert "ask compliance" in found.output
    assert not out.exists()


@pytest.mark.parametrize(
    ("old", "new", "column"),
    [
        ("headline = [-1, 1]", "headline = [-1, 1]\nsecond_lines = true", "inputs.listings"),
        ("headline = [-1, 1]", 'headline = [-1, 1]\nrepeats = "all"', "event_time.repeats"),
        (
            "headline = [-1, 1]",
            'headline = [-1, 1]\nconfounding = "drop"',
            "event_time.confounding",
        ),
        ("headline = [-1, 1]", 'headline = [-1, 1]\nday_zero = "rumour"', "event_time.day_zero"),
    ],
)
def test_keys_that_do_not_fit(folder: Path, old: str, new: str, column: str) -> None:
    text = (folder / "study.toml").read_text()
    (folder / "study.toml").write_text(text.replace(old, new, 1))
    with pytest.raises(InputProblem) as caught:
        load_study(folder / "study.toml")
    assert [(f.rule, f.column) for f in caught.value.findings] == [("bad_value", column)]


def test_all_kept_needs_room_for_the_company_among_the_clusters(folder: Path) -> None:
    text = (folder / "study.toml").read_text()
    clusters = f'{COLUMN}\nclusters = ["spare", "year"]'
    (folder / "study.toml").write_text(text.replace(COLUMN, clusters, 1))
    with pytest.raises(InputProblem) as caught:
        load_study(folder / "study.toml", {"event_time": {"repeats": "keep_all"}})
    assert "regression.clusters" in [finding.column for finding in caught.value.findings]
