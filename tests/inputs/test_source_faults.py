"""Faults of sources that stop a study before a cell is looked at, and one code cut by a sheet."""

from __future__ import annotations

import zipfile
from collections.abc import Callable
from pathlib import Path

import pandas as pd
import pytest

from pipeline.characteristics.recipes import Recipe, raw_variables
from pipeline.core.findings import InputProblem
from pipeline.core.ledger import Action, Ledger, LedgerEntry, StageLedger
from pipeline.inputs.contracts import Column
from pipeline.inputs.files import Source, read_table
from pipeline.inputs.postgres import Fetcher
from pipeline.inputs.source import POSTGRES
from pipeline.inputs.typed import typed
from pipeline.returns.screens import refuse_empty
from tests.study.studies import one_refusal


def text(name: str, content: str) -> Callable[[Path], Source]:
    def write(folder: Path) -> Source:
        (folder / name).write_text(content)
        return Source("deals", folder / name)

    return write


def bomb(folder: Path) -> Source:
    path = folder / "deals.xlsx"
    with zipfile.ZipFile(path, "w", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr("xl/worksheets/sheet1.xml", b" " * (1 << 25))
    return Source("deals", path)


SOURCES = {
    "ambiguous_delimiter": text("deals.csv", "a;b,c;d\n1;2,3;4\n5;6,7;8\n"),
    "archive_too_large": bomb,
}


@pytest.mark.parametrize("rule", SOURCES)
def test_a_source_that_cannot_be_trusted_is_refused(rule: str, tmp_path: Path) -> None:
    with pytest.raises(InputProblem) as caught:
        read_table(SOURCES[rule](tmp_path))
    assert [finding.rule for finding in caught.value.findings] == [rule]


def test_a_data_base_that_nothing_names(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.delenv("DEALS_HERE", raising=False)
    source = Source("deals", POSTGRES, relation="deals", connection="DEALS_HERE")
    with pytest.raises(InputProblem) as caught:
        Fetcher(tmp_path).at_hand(source)
    (finding,) = caught.value.findings
    assert finding.rule == "no_database"


def test_codes_that_a_sheet_cut_are_lost_digits(tmp_path: Path) -> None:
    source = text("deals.csv", "deal_id\n1.23E+11\nD2\n")(tmp_path)
    _, findings = typed(read_table(source), source, [Column("deal_id", "text")], "")
    assert [(finding.rule, finding.rows) for finding in findings] == [("lost_digits", (2,))]


def test_no_deals_left_names_the_stage_that_lost_most() -> None:
    entries = tuple(
        LedgerEntry(deal, "short_estimation", Action.DROPPED, "3", "120") for deal in ("D1", "D2")
    )
    ledger = Ledger((StageLedger("deal list", 2, ()), StageLedger("estimation", 2, entries)))
    refuse_empty(1, ledger)
    with pytest.raises(InputProblem) as caught:
        refuse_empty(0, ledger)
    (finding,) = caught.value.findings
    assert finding.rule == "no_deals_left"
    assert "2 of 2 left at 'estimation': short estimation" in finding.got


def test_a_lag_without_history_asks_for_the_candidates() -> None:
    deals = pd.DataFrame({"deal_id": ["D1"], "leverage": [0.2]})
    recipe = Recipe("past", "column", ("leverage",), lag=1)
    made, (finding,) = raw_variables(deals, {"past": recipe}, ["past"], {}, "deal_id", "deals")
    assert made == {}
    assert (finding.rule, finding.column) == ("lag_without_history", "characteristics.past.lag")


@pytest.mark.parametrize("name", ["constant", "in_regression", "car_m1_1", "bhar_0_20"])
def test_a_reserved_name_is_refused(name: str, tmp_path: Path) -> None:
    named = ("[characteristics.big]", f"[characteristics.{name}]")
    finding = one_refusal(tmp_path, named)
    assert (finding.rule, finding.column) == ("reserved_name", "characteristics")
    assert f"'{name}'" in finding.got
