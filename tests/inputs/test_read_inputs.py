"""All tables of a study at once: every kind of finding, with its file, row and column."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from pipeline.core.findings import InputProblem, Severity
from pipeline.core.ledger import Action
from pipeline.core.rules import RULES
from pipeline.inputs.files import Source
from pipeline.inputs.read import Tables, read_inputs
from pipeline.inputs.wanted import Wanted
from tests.inputs.tables import WANTED, Frames, frames, read_frames, refused, write_all, write_csv

Spoil = Callable[[Frames], None]


@pytest.fixture(scope="module")
def tables(tmp_path_factory: pytest.TempPathFactory) -> Tables:
    return read_frames(tmp_path_factory.mktemp("sound"), frames())


def test_deals_typed(tables: Tables) -> None:
    deals = tables.deals
    assert deals["deal_id"].tolist() == ["D1", "D2", "D3"]
    np.testing.assert_array_equal(deals["market_value"], [100.5, np.nan, 300.0])
    assert deals["shares"].tolist() == [1.0, 0.0, 1.0]
    assert deals["year"].tolist() == [2021.0] * 3
    assert deals["announced_utc"].dt.hour.tolist()[:2] == [8, 9]
    assert pd.isna(deals["announced_utc"].iloc[2])
    assert deals["status"].tolist() == ["", "", ""]
    assert "notes" not in deals  # the study does not use it
    assert "announced_at" not in deals
    assert tables.findings == ()
    assert (tables.ledger.rows_in, tables.ledger.rows_kept) == (3, 3)


def test_prices_of_the_securities_named(tables: Tables) -> None:
    assert sorted(set(tables.prices["security"])) == ["A", "B"]  # nobody names C
    assert list(tables.prices.columns) == ["security", "date", "close", "volume"]
    assert np.isnan(tables.prices["volume"].iloc[1])


def test_listings_of_deals_and_candidates(tables: Tables) -> None:
    found = {tuple(row) for row in tables.listings.itertuples(index=False)}
    assert found == {("A", "XLON"), ("B", "XNYS"), ("D", "XLON")}
    assert len(tables.listings) == 3
    assert tables.factor_names == ("size",)


def test_without_the_tables_a_study_may_lack(tmp_path: Path) -> None:
    few = {name: frame for name, frame in frames().items() if name in (
        "deals", "prices", "benchmarks")}  # fmt: skip
    found = read_frames(tmp_path, few, Wanted())
    assert found.candidates is None
    assert found.factors is None
    assert found.factor_names == ()
    assert len(found.listings) == 2
    del few["prices"]
    with pytest.raises(KeyError, match="must each have a source"):
        read_frames(tmp_path, few, Wanted())


def put(table: str, row: int, column: str, value: str) -> Spoil:
    def spoil(tables: Frames) -> None:
        tables[table].loc[row, column] = value

    return spoil


def lose(table: str, column: str) -> Spoil:
    def spoil(tables: Frames) -> None:
        tables[table] = tables[table].drop(columns=column)

    return spoil


def repeat(table: str, row: int, **changes: str) -> Spoil:
    def spoil(tables: Frames) -> None:
        again = tables[table].loc[[row]].assign(**changes)
        tables[table] = pd.concat([tables[table], again], ignore_index=True)

    return spoil


def empty(table: str) -> Spoil:
    def spoil(tables: Frames) -> None:
        tables[table] = tables[table].iloc[:0]

    return spoil


def every(table: str, column: str, value: str) -> Spoil:
    def spoil(tables: Frames) -> None:
        tables[table][column] = value

    return spoil


CASES: dict[str, tuple[Spoil, str, str, str, str]] = {
    "column": (lose("deals", "security"), "missing_column", "deals.csv", "", "security"),
    "study column": (lose("deals", "shares"), "missing_column", "deals.csv", "", "shares"),
    "price column": (lose("prices", "close"), "missing_column", "prices.csv", "", "close"),
    "price code": (lose("prices", "security"), "missing_column", "prices.csv", "", "security"),
    "level": (lose("benchmarks", "close"), "missing_column", "benchmarks.csv", "", "close"),
    "as of": (lose("candidates", "as_of"), "missing_column", "candidates.csv", "", "as_of"),
    "factor": (lose("factors", "date"), "missing_column", "factors.csv", "", "date"),
    "no rows": (empty("benchmarks"), "empty_table", "benchmarks.csv", "", ""),
    "announcement": (
        put("deals", 1, "announced_at", "March"),
        "unparseable_date", "deals.csv", "3", "announced_at",
    ),
    "american date": (
        put("prices", 0, "date", "03/01/2021"),
        "mixed_date_formats", "prices.csv", "2", "date",
    ),
    "serial date": (
        put("prices", 1, "date", "44256"), "mixed_date_formats", "prices.csv", "3", "date",
    ),
    "far date": (
        put("prices", 1, "date", "1900-01-01"), "date_out_of_range", "prices.csv", "3", "date",
    ),
    "number": (
        put("deals", 2, "market_value", "1,5"),
        "unparseable_number", "deals.csv", "4", "market_value",
    ),
    "candidate number": (
        put("candidates", 1, "leverage", "high"),
        "unparseable_number", "candidates.csv", "3", "leverage",
    ),
    "error cell": (
        put("deals", 0, "industry", "#REF!"), "error_cell", "deals.csv", "2", "industry",
    ),
    "zone": (
        put("deals", 0, "timestamp_zone", ""), "missing_zone", "deals.csv", "2", "announced_at",
    ),
    "unknown zone": (
        put("deals", 0, "timestamp_zone", "Mars"), "missing_zone", "deals.csv", "2", "announced_at",
    ),
    "clocks": (
        put("deals", 0, "announced_at", "2021-03-28 01:30"),
        "impossible_local_time", "deals.csv", "2", "announced_at",
    ),
    "empty cell": (put("deals", 1, "exchange", ""), "missing_value", "deals.csv", "3", "exchange"),
    "no moment": (
        put("deals", 1, "announced_at", ""), "missing_value", "deals.csv", "3", "announced_at",
    ),
    "one deal twice": (
        repeat("deals", 0, shares="0"), "conflicting_deal", "deals.csv", "2, 5", "deal_id",
    ),
    "company-year twice": (
        repeat("candidates", 0, deal_id=""),
        "conflicting_deal", "candidates.csv", "2, 5", "security, year",
    ),
    "deal named twice": (
        put("candidates", 2, "deal_id", "D1"),
        "conflicting_deal", "candidates.csv", "2, 4", "deal_id",
    ),
    "currencies": (
        put("deals", 1, "currency", "USD"), "mixed_currencies", "deals.csv", "", "currency",
    ),
    "two prices": (
        repeat("prices", 0, close="9"), "conflicting_price", "prices.csv", "2, 6", "security, date",
    ),
    "two levels": (
        repeat("benchmarks", 1, close="9"),
        "conflicting_price", "benchmarks.csv", "3, 5", "exchange, date",
    ),
    "two factor values": (
        repeat("factors", 1, size="0.1"),
        "conflicting_price", "factors.csv", "3, 4", "exchange, date",
    ),
    "negative price": (
        put("prices", 2, "close", "-20"), "nonpositive_price", "prices.csv", "4", "close",
    ),
    "level of zero": (
        put("benchmarks", 0, "close", "0"), "nonpositive_price", "benchmarks.csv", "2", "close",
    ),
    "nobody priced": (every("prices", "security", "ZZ"), "no_prices", "prices.csv", "", "security"),
}  # fmt: skip


@pytest.mark.parametrize("name", CASES)
def test_every_kind_of_finding(name: str, tmp_path: Path) -> None:
    """Rule, file, row of the sheet and column; one cause, one finding."""
    spoil, rule, file, row, column = CASES[name]
    (finding,) = refused(tmp_path, spoil)
    assert (finding.rule, finding.file, finding.row, finding.column) == (rule, file, row, column)
    assert finding.severity is Severity.ERROR
    assert finding.rule in RULES
    for text in (finding.got, finding.expected, finding.remedy):
        assert text


def test_factors_in_percent(tmp_path: Path) -> None:
    """A daily standard deviation of 20% is none of a factor: common practice, no source."""

    def percent(tables: Frames) -> None:
        tables["factors"]["size"] = ["0.6", "-0.4"]

    (finding,) = refused(tmp_path, percent)
    assert (finding.rule, finding.file, finding.column) == ("return_unit", "factors.csv", "size")


def test_findings_of_all_files_at_once(tmp_path: Path) -> None:
    def spoil(tables: Frames) -> None:
        put("deals", 1, "announced_at", "March")(tables)
        put("deals", 2, "market_value", "x")(tables)
        lose("benchmarks", "close")(tables)
        put("candidates", 0, "as_of", "2020")(tables)
        put("prices", 0, "close", "ten")(tables)
        repeat("factors", 0, size="0.05")(tables)

    found = refused(tmp_path, spoil)
    assert [(finding.rule, finding.file) for finding in found] == [
        ("unparseable_number", "deals.csv"),
        ("unparseable_date", "deals.csv"),
        ("unparseable_date", "candidates.csv"),
        ("unparseable_number", "prices.csv"),
        ("missing_column", "benchmarks.csv"),
        ("conflicting_price", "factors.csv"),
    ]


def test_a_missing_file_does_not_hide_the_others(tmp_path: Path) -> None:
    sources = write_all(tmp_path, frames())
    sources["deals"] = Source("deals", tmp_path / "none.csv")
    write_csv(frames()["prices"].assign(close="x"), tmp_path / "prices.csv")
    with pytest.raises(InputProblem) as caught:
        read_inputs(sources, WANTED)
    assert [finding.rule for finding in caught.value.findings] == [
        "missing_file", "unparseable_number",
    ]  # fmt: skip


def test_an_exact_duplicate_leaves_with_an_entry(tmp_path: Path) -> None:
    tables = frames()
    repeat("deals", 1, notes="another note")(tables)  # a column the study does not use
    repeat("prices", 0)(tables)
    found = read_frames(tmp_path, tables)
    assert found.deals["deal_id"].tolist() == ["D1", "D2", "D3"]
    (entry,) = found.ledger.entries
    assert (entry.deal, entry.rule, entry.action) == (
        "D2 (row 5)", "duplicate_deal", Action.DROPPED,
    )  # fmt: skip
    assert (found.ledger.rows_in, found.ledger.rows_kept) == (4, 3)
    assert len(found.prices) == 3


def test_one_currency_is_asked_of_money_alone(tmp_path: Path) -> None:
    """Returns know no currency: without money two currencies do no harm."""
    tables = frames()
    put("deals", 1, "currency", "USD")(tables)
    tables["deals"] = tables["deals"].drop(columns="market_value")
    found = read_frames(tmp_path, tables, Wanted(deal_numbers=("shares",)))
    assert found.deals["market_value"].isna().all()


def test_a_zone_and_format_declared_for_the_file(tmp_path: Path) -> None:
    tables = frames()
    tables["deals"]["announced_at"] = ["01/03/2021 08:00", "", "01/06/2021 08:00"]
    tables["deals"]["timestamp_zone"] = ""
    tables["deals"].loc[1, "announced_at"] = "02/03/2021"
    tables["deals"]["earnings_release"] = ["03/04/2021", "", "2021-06-02"]
    found = read_inputs(
        write_all(tmp_path, tables), WANTED, zone="Europe/London", date_format="%d/%m/%Y %H:%M"
    )
    assert found.deals["announced_utc"].dt.strftime("%d %H").tolist()[::2] == ["01 08", "01 07"]
    assert found.deals["announced_date"].dt.strftime("%d/%m").tolist() == [
        "01/03",
        "02/03",
        "01/06",
    ]
    assert pd.isna(found.deals["announced_utc"].iloc[1])
    assert found.deals["earnings_release"].dt.strftime("%d/%m").tolist()[::2] == ["03/04", "02/06"]
