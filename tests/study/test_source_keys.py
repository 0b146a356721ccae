"""Keys about how a table is written: what is refused, and what the reader is told."""

from __future__ import annotations

from pathlib import Path

import pytest

from pipeline.core.findings import Finding
from pipeline.inputs.source import POSTGRES
from pipeline.study import plan
from pipeline.study.load import load_study
from pipeline.study.plan_reach import reach
from pipeline.study.schema import Study
from tests.study import studies
from tests.study.studies import BASE

PRICES = "[inputs.source.prices]\n"


def study_of(folder: Path, text: str) -> Study:
    return load_study(studies.write(folder / "study.toml", text))


def refused(folder: Path, text: str) -> tuple[Finding, ...]:
    return studies.refused(studies.write(folder / "study.toml", text))


def test_keys_reach_the_source(tmp_path: Path) -> None:
    text = BASE + PRICES + 'delimiter = ";"\ndecimal = ","\nencoding = "cp1252"\nheader_row = 3\n'
    text += 'layout = "wide"\n[series.prices]\ngiven = "returns"\nunit = "percent"\n'
    source = plan.sources(study_of(tmp_path, text))["prices"]
    assert (source.delimiter, source.decimal, source.encoding) == (";", ",", "cp1252")
    assert (source.header_row, source.wide, source.value) == (3, True, "return")
    assert plan.sources(study_of(tmp_path, BASE))["prices"].wide is None


def test_a_data_base_in_place_of_a_file(tmp_path: Path) -> None:
    text = BASE.replace('"tables/prices.csv"', '"postgresql"') + PRICES + 'query = "SELECT 1"\n'
    text = text.replace("[inputs]", '[inputs]\nconnection = "DESK"')
    source = plan.sources(study_of(tmp_path, text))["prices"]
    assert (source.path, source.query, source.connection) == (POSTGRES, "SELECT 1", "DESK")
    assert source.file == "PostgreSQL, query of prices"


@pytest.mark.parametrize(
    ("extra", "key"),
    [
        (PRICES + 'delimiter = "x"', "inputs.source.prices.delimiter"),
        (PRICES + 'encoding = "klingon"', "inputs.source.prices.encoding"),
        (PRICES + 'encoding = "base64"', "inputs.source.prices.encoding"),
        (PRICES + 'table = "t"', "inputs.source.prices.table"),
        (PRICES + 'delimiter = ","\ndecimal = ","', "inputs.source.prices.decimal"),
        ('[inputs.source.deals]\ndelimiter = ";"', "inputs.source.deals.delimiter"),
        ('[inputs.source.deals]\nlayout = "wide"', "inputs.source.deals.layout"),
        ("[inputs.source.news]\nheader_row = 2", "inputs.source.news"),
        ('[inputs.source.deals]\nunits = { deal_value = "million" }', "report.currency"),
        (
            '[inputs.source.deals]\nunits = { deal_value = "dozen" }',
            "inputs.source.deals.units.deal_value",
        ),
        (PRICES + "sheet = 1", "inputs.source.prices.sheet"),
    ],
)
def test_keys_that_do_not_fit_are_refused(extra: str, key: str, tmp_path: Path) -> None:
    assert key in {finding.column for finding in refused(tmp_path, BASE + extra + "\n")}


@pytest.mark.parametrize("keys", ["", 'table = "a"\nquery = "SELECT 1"\n'])
@pytest.mark.parametrize("place", ["postgresql", "tables/prices.duckdb"])
def test_a_data_base_needs_a_table_or_a_query(keys: str, place: str, tmp_path: Path) -> None:
    text = BASE.replace("tables/prices.csv", place) + (PRICES + keys if keys else "")
    (finding,) = refused(tmp_path, text)
    assert finding.column == "inputs.source.prices"


@pytest.mark.parametrize(
    ("currency", "unit", "factor"),
    [
        ("USD million", "thousand", 1e-3),
        ("USD million", "one", 1e-6),
        ("USD bn", "million", 1e-3),
        ("USD", "million", 1e6),
        ("EUR thousand", "billion", 1e6),
    ],
)
def test_money_is_brought_to_the_scale_of_the_report(
    currency: str, unit: str, factor: float, tmp_path: Path
) -> None:
    text = BASE + f'[inputs.source.deals]\nunits = {{ deal_value = "{unit}" }}\n'
    text += f'[report]\ncurrency = "{currency}"\n'
    source = plan.sources(study_of(tmp_path, text))["deals"]
    assert source.factors["deal_value"] == pytest.approx(factor, rel=1e-12)


def test_what_widens_the_reach(tmp_path: Path) -> None:
    """Estimation from -150, windows to 5, the path to 10, halts of 10 sessions, ten to spare."""
    found = reach(study_of(tmp_path, BASE))
    assert (found.before, found.after, found.candidate_before, found.whole) == (160, 30, 35, "")
    placebo = reach(study_of(tmp_path, BASE + "[placebo]\ndraws = 10\n"))
    assert (placebo.before, placebo.after) == (410, 280)
    held = reach(study_of(tmp_path, BASE + "[calendar_time]\nhorizons = [250]\n"))
    assert held.after == 250 + 1 + 10 + 10
    whole = BASE.replace("[inputs]", '[inputs]\nhistory = "whole"')
    assert "history" in reach(study_of(tmp_path, whole)).whole
    gone = BASE.replace("[inputs]", '[inputs]\ndelistings = "gone.csv"')
    assert "delisting" in reach(study_of(tmp_path, gone)).whole
