"""The tables few studies have: listings of a company, and other news."""

from __future__ import annotations

from pathlib import Path

import pandas as pd
import pytest

from pipeline.core.findings import InputProblem
from pipeline.inputs.files import Source
from pipeline.inputs.others import read_listings, read_news
from pipeline.inputs.read import Tables, read_inputs
from tests.inputs.tables import WANTED, Frames, frames, write_all, write_csv

LISTINGS = pd.DataFrame(
    {
        "security": ["A", "A"],
        "line": ["A.L", "A.N"],
        "exchange": ["xlon", "XNYS"],
        "primary": ["yes", ""],
        "currency": ["GBP", "USD"],
    }
)


def source(folder: Path, table: pd.DataFrame, name: str = "listings") -> Source:
    return Source(name, write_csv(table, folder / f"{name}.csv"))


def test_listings_are_typed(tmp_path: Path) -> None:
    table, findings = read_listings(source(tmp_path, LISTINGS))
    assert findings == []
    assert table["exchange"].tolist() == ["XLON", "XNYS"]
    assert table["primary"].fillna(0).tolist() == [1.0, 0.0]
    assert table["home"].isna().all()


@pytest.mark.parametrize(
    ("changes", "row", "column", "words"),
    [
        ({"primary": ["1", "1"]}, "2, 3", "primary", "several lines as primary listing"),
        ({"home": ["1", "1"]}, "2, 3", "home", "several lines as home market"),
        ({"line": ["A.L", "A.L"]}, "2, 3", "line", "one line on several rows"),
    ],
)
def test_listings_that_contradict_one_another(
    changes: dict[str, list[str]], row: str, column: str, words: str, tmp_path: Path
) -> None:
    _, (finding,) = read_listings(source(tmp_path, LISTINGS.assign(**changes)))
    assert (finding.rule, finding.row, finding.column) == ("conflicting_listing", row, column)
    assert words in finding.got


def test_news_is_typed_and_told_once(tmp_path: Path) -> None:
    table = pd.DataFrame(
        {
            "security": ["A", "A", "B"],
            "date": ["2021-03-01", "2021-03-01", "2021-03-02"],
            "kind": ["guidance", "guidance", "dividend"],
        }
    )
    news, findings = read_news(source(tmp_path, table, "news"), "")
    assert findings == []
    assert news["kind"].tolist() == ["guidance", "dividend"]
    _, (finding,) = read_news(source(tmp_path, table.assign(date="soon"), "news"), "")
    assert (finding.rule, finding.file) == ("unparseable_date", "news.csv")


def with_listings(folder: Path, spoil: Frames) -> Tables:
    sources = write_all(folder, spoil)
    sources["listings"] = source(folder, LISTINGS)
    return read_inputs(sources, WANTED)


def test_a_company_stands_with_each_of_its_lines(tmp_path: Path) -> None:
    """Its prices are read under the codes of its lines, and its two exchanges are no error."""
    tables = frames()
    tables["prices"]["security"] = ["A.L", "A.N", "B", "C"]
    tables["deals"].loc[2, "exchange"] = "XNYS"
    found = with_listings(tmp_path, tables)
    pairs = {tuple(row) for row in found.listings.itertuples(index=False)}
    assert pairs == {("A.L", "XLON"), ("A.N", "XNYS"), ("B", "XNYS"), ("D", "XLON")}
    assert sorted(found.prices["security"]) == ["A.L", "A.N", "B"]


def test_two_exchanges_nobody_declared_are_still_an_error(tmp_path: Path) -> None:
    tables = frames()
    tables["deals"].loc[1, "security"] = "Q"
    tables["candidates"].loc[1, "security"] = "Q"
    tables["candidates"].loc[1, "exchange"] = "XLON"
    with pytest.raises(InputProblem) as caught:
        with_listings(tmp_path, tables)
    assert "two_exchanges" in {finding.rule for finding in caught.value.findings}
