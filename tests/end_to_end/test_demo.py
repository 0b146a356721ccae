"""The demo through the command, held against the truth it was made from."""

from __future__ import annotations

import json
import re
from pathlib import Path

import pandas as pd
import pytest

from tests.end_to_end.conftest import ROOT, dealwake
from tests.refresh_sample import DATA

TRUTH = json.loads((ROOT / "data_demo" / "truth.json").read_text())
EFFECT = TRUTH["parameters"]["effect_shares"]


def treatment_row(folder: Path, estimator: str) -> pd.Series:
    estimates = pd.read_parquet(folder / "data" / "estimates.parquet")
    rows = estimates[
        (estimates["estimator"] == estimator)
        & (estimates["term"] == "paid_in_shares")
        & (estimates["stage"] == "")
    ]
    assert len(rows) == 1
    return rows.iloc[0]


def test_the_run_leaves_every_document(demo: Path) -> None:
    for name in ("report.html", "memo.docx", "tables.xlsx", "manifest.json"):
        assert (demo / name).stat().st_size > 1000, name
    assert list((demo / "tables").glob("*.tex"))
    figures = sorted(path.stem for path in (demo / "figures").glob("*.svg"))
    assert figures
    assert sorted(path.stem for path in (demo / "figures").glob("*.csv")) == figures
    expected = {
        "abnormal_returns", "deals", "event_tests", "estimates", "diagnostics", "sensitivity",
        "ledger", "findings",
    }  # fmt: skip
    assert expected <= {path.stem for path in (demo / "data").glob("*.parquet")}


def test_the_screen_shows_finding_ledger_and_place(demo: Path) -> None:
    shown = (demo.parent / "stdout.txt").read_text()
    assert "bp" in shown
    assert "kept" in shown
    assert "report.html" in shown
    assert "not advice" in shown


def test_the_instrumented_interval_covers_the_truth(demo: Path) -> None:
    row = treatment_row(demo, "two_stage_least_squares")
    assert row["ci_low"] <= EFFECT <= row["ci_high"]
    assert row["std_error"] < 0.007


def test_the_ordinary_interval_misses_the_truth(demo: Path) -> None:
    row = treatment_row(demo, "ols")
    assert row["ci_high"] < EFFECT


def test_fixed_effects_do_not_mend_a_hidden_confounder(demo: Path) -> None:
    row = treatment_row(demo, "fixed_effects")
    assert row["ci_high"] < EFFECT


def test_announcers_are_not_a_random_draw(demo: Path) -> None:
    estimates = pd.read_parquet(demo / "data" / "estimates.parquet")
    row = estimates[
        (estimates["estimator"] == "heckman_two_step")
        & (estimates["term"] == "inverse_mills")
        & (estimates["stage"] == "")
    ].iloc[0]
    assert row["statistic"] > 2


def test_all_columns_stand_on_the_same_rows(demo: Path) -> None:
    estimates = pd.read_parquet(demo / "data" / "estimates.parquet")
    own = estimates[estimates["stage"] == ""]
    assert own["n"].nunique() == 1
    deals = pd.read_parquet(demo / "data" / "deals.parquet")
    assert int(deals["in_regression"].sum()) == own["n"].iloc[0]


def test_planted_defects_reach_the_ledger(demo: Path) -> None:
    ledger = pd.read_parquet(demo / "data" / "ledger.parquet")
    dropped = set(ledger.loc[ledger["action"] == "dropped", "rule"])
    noted = set(ledger["rule"])
    assert {"duplicate_deal", "short_estimation", "suspected_split"} <= dropped
    assert {"moved_to_session", "time_unknown", "confounded", "delisted"} <= noted


MARKS = {
    "after_close": {"moved_to_session"},
    "weekend": {"moved_to_session"},
    "exchange_holiday": {"moved_to_session"},
    "date_only": {"time_unknown", "moved_to_session"},
    "short_history": {"short_estimation"},
    "delisting_inside_window": {"delisted"},
    "earnings_within_one_session": {"confounded"},
    "unadjusted_split": {"suspected_split"},
    "untraded_stretch": {"gaps_in_estimation"},
}


@pytest.mark.parametrize("kind", MARKS)
def test_each_planted_deal_defect_is_told(demo: Path, kind: str) -> None:
    planted = [d["deal_id"] for d in TRUTH["defects"] if d["kind"] == kind]
    assert planted, f"the demo plants no {kind}"
    ledger = pd.read_parquet(demo / "data" / "ledger.parquet")
    for deal in planted:
        assert set(ledger.loc[ledger["deal"] == deal, "rule"]) & MARKS[kind], deal


def test_ledger_counts_reconcile(demo: Path) -> None:
    ledger = pd.read_parquet(demo / "data" / "ledger.parquet")
    deals = pd.read_parquet(demo / "data" / "deals.parquet")
    read = len(pd.read_excel(ROOT / "data_demo" / "deals.xlsx"))
    lost = ledger[ledger["action"] == "dropped"]
    assert read - len(lost) == int(deals["in_regression"].sum())
    before_regression = lost[lost["stage"] != "regression"]
    assert read - len(before_regression) == len(deals)


def test_same_bytes_in_data_for_the_same_study(demo: Path, tmp_path: Path) -> None:
    dealwake("run", ROOT / "configs" / "demo.toml", "--out", tmp_path / "again", "--quiet")
    for path in sorted((demo / "data").iterdir()):
        assert path.read_bytes() == (tmp_path / "again" / "data" / path.name).read_bytes(), (
            path.name
        )


def test_the_committed_sample_holds_a_fresh_runs_numbers(demo: Path) -> None:
    sample = ROOT / "reports" / "sample" / "data"
    for name in DATA:
        kept = pd.read_parquet(sample / f"{name}.parquet")
        fresh = pd.read_parquet(demo / "data" / f"{name}.parquet")
        # Other versions of the numerical libraries may move the last digits.
        pd.testing.assert_frame_equal(kept, fresh, rtol=1e-6, atol=1e-9)


def test_the_sample_page_says_what_a_fresh_page_says(demo: Path) -> None:
    sample = (ROOT / "reports" / "sample" / "report.html").read_text(encoding="utf-8")
    fresh = (demo / "report.html").read_text(encoding="utf-8")
    assert prose(sample) == prose(fresh)
    assert len(prose(fresh)) > 2000


def prose(page: str) -> str:
    """The words and numbers of a page, without its pictures."""
    without = re.sub(r"<(svg|style)\b.*?</\1>", " ", page, flags=re.DOTALL)
    return " ".join(re.sub(r"<[^>]+>", " ", without).split())
