"""The demo's pages: every deal has one, and its numbers are those of data/."""

from __future__ import annotations

import json
import re
from pathlib import Path

import pandas as pd
import pytest
from lxml import etree

from tests.end_to_end.conftest import ROOT, dealwake

FIGURES = {
    "average_path", "calendar", "distribution", "columns", "first_stage", "overlap", "balance",
    "selection_correction", "placebo", "power", "left_out", "left_out_effect_of_paid_in_shares",
    "left_out_least_squares_effect_of_paid_in_shares", "sensitivity", "hidden_factors",
    "specifications", "assumptions", "violations",
}  # fmt: skip


def data(folder: Path, name: str) -> pd.DataFrame:
    return pd.read_parquet(folder / "data" / f"{name}.parquet")


def parsed(path: Path) -> etree._Element:
    return etree.fromstring(path.read_bytes().split(b"\n", 1)[1])


def cells(tree: etree._Element, name: str) -> list[list[str]]:
    """The printed rows of a table, one list of lines a row."""
    (holder,) = [node for node in tree.iter("{*}div") if node.get("id") == f"table-{name}"]
    return [
        ["".join(cell.itertext()) for cell in row] for row in holder.findall(".//{*}tbody/{*}tr")
    ]


def printed(value: float) -> str:
    return f"{value:,.0f}".replace("-", "−").replace("−0", "0")


def test_every_figure_of_a_committee_report_is_there(demo: Path) -> None:
    assert {path.stem for path in (demo / "figures").glob("*.svg")} >= FIGURES


def test_every_deal_measured_has_a_page_and_every_link_arrives(demo: Path) -> None:
    pages = {path.stem for path in (demo / "deals").glob("*.html")}
    assert pages == {*data(demo, "deals")["deal"], "index"}
    for path in (demo / "report.html", demo / "deals" / "index.html", demo / "deals" / "D208.html"):
        for node in parsed(path).iter("{*}a"):
            link = node.get("href") or ""
            if not link.startswith(("#", "data:")):
                assert (path.parent / link).resolve().is_file(), (path.name, link)
    leads = {node.get("href") for node in parsed(demo / "report.html").iter("{*}a")}
    assert {"deals/index.html", "deals/D001.html"} <= leads


@pytest.mark.parametrize("deal", ["D001", "D208", "D400"])
def test_a_pages_numbers_are_those_of_the_data(demo: Path, deal: str) -> None:
    tree = parsed(demo / "deals" / f"{deal}.html")
    quoted = [(node.get("value"), node.get("title") or "") for node in tree.iter("{*}data")]
    assert len(quoted) > 8
    for value, title in quoted:
        match = re.fullmatch(r"data/(\w+)\.parquet: (\w+) where (.*)", title)
        assert match
        rows = data(demo, match[1])
        for part in match[3].split(", "):
            name, _, key = part.partition(" ")
            rows = rows[rows[name].astype(str) == key]
        assert rows[match[2]].tolist() == [float(str(value))]
    days = data(demo, "deal_days").set_index("deal").loc[deal]
    for row, (_, day) in zip(cells(tree, "days"), days.iterrows(), strict=True):
        assert row[1] == day["date"]
        shown = [printed(1e4 * day[name]) for name in ("abnormal_return", "expected", "reach")]
        assert row[2:5] == shown
        assert (row[5] == "outside") == (abs(day["abnormal_return"]) > day["reach"])


def test_a_deals_fits_and_weight_are_those_of_the_data(demo: Path) -> None:
    tree = parsed(demo / "deals" / "D208.html")
    fits = data(demo, "deal_fits").set_index("deal").loc["D208"]
    shown = {row[0]: row[1:] for row in cells(tree, "fits")}
    for _, fit in fits.iterrows():
        numbers = [1e4 * fit[name] for name in ("observed", "fitted", "residual")]
        assert shown[fit["column"]] == [printed(number) for number in numbers]
    left_out = data(demo, "left_out")
    own = left_out[(left_out["dimension"] == "deal") & (left_out["group"] == "D208")]
    assert [row[0].lower() for row in cells(tree, "influence")] == [
        target.lower() for target in own["target"]
    ]
    entries = data(demo, "ledger")
    assert len(cells(tree, "ledger")) == (entries["deal"] == "D208").sum()


def test_the_fits_explain_what_the_columns_say(demo: Path) -> None:
    """With a constant or effects, least squares leaves a mean of zero."""
    fits = data(demo, "deal_fits")
    for title, part in fits.groupby("column"):
        assert part["residual"].mean() == pytest.approx(0, abs=1e-12), title
        assert (part["fitted"] + part["residual"] - part["observed"]).abs().max() < 1e-12


def test_the_command_tells_the_same(demo: Path, tmp_path: Path) -> None:
    file = tmp_path / "made" / "deal.html"
    done = dealwake(
        "deal", ROOT / "configs" / "demo.toml", "D208", "--page", file, "--json"
    )  # fmt: skip
    told = json.loads(done.stdout)["told"]
    assert Path(json.loads(done.stdout)["page"]) == file
    page, kept = parsed(file), parsed(demo / "deals" / "D208.html")
    for name in ("days", "characteristics", "fits", "influence", "ledger"):
        rows = cells(kept, name)
        assert cells(page, name) == rows
        assert [list(row.values()) for row in told[name]] == rows
    assert not next(iter(page.iter("{*}nav"))).xpath("//*[@class='ways']")
