"""A study that starts from a deal list with its own outcome, an invented list of bid premiums."""

from __future__ import annotations

import io
import json
import re
import signal
import zipfile
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from typer.testing import CliRunner, Result

from pipeline.cli import app
from pipeline.core.estimate import Estimate
from pipeline.core.findings import InputProblem
from pipeline.core.results import Results
from pipeline.flow import check, run
from pipeline.report.bundle import documents
from pipeline.report.content import report
from pipeline.report.document import Document
from pipeline.report.memo import memo
from pipeline.study.load import load_study
from tests.end_to_end.conftest import dealwake
from tests.study.studies import write

STUDY = """
title = "Agreeing first"
question = "Does agreeing with the board first lower the premium?"

[inputs]
deals = "bids.csv"

[outcome]
column = "bid_premium"
unit = "percent"
standard_error = "premium_error"
date = "announced_at"
share_of = "target_value"

[characteristics.size]
label = "Target's value, log"
column = "target_value"
log = true

[regression]
treatment = "agreed_first"
controls = ["size", "rival"]
fixed_effects = ["sector", "year"]
columns = ["ols", "fixed_effects", "variance_weighted", "two_stage_least_squares"]

[instruments]
for = "agreed_first"
use = ["vacant_seat"]
rationale = "A seat on the board that fell vacant before the bid was thought of."

[scrutiny]
suspects = [{ factor = "Bidders call boards they know", on_outcome = "-", on_treatment = "+" }]

[scrutiny.grid]
run = true
permutations = 19

[labels]
agreed_first = "Agreed with the board first"
target_value = "target's value"

[report]
groups = ["not agreed", "agreed first"]
currency = "EUR million"
"""
FEATURE = "agreed_first"
# What speaks of returns measured from prices, and of their unit.
FOREIGN = re.compile(
    r"\b(abnormal|CARs?|returns?|reactions?|session|day zero|bp|basis points?|share prices?|"
    r"headline window|expected return|placebo|announced|announcement)\b",
    re.IGNORECASE,
)


def bids(deals: int = 120) -> pd.DataFrame:
    """An invented list: agreeing first takes 8 points off the premium, two premiums are empty."""
    stream = np.random.default_rng(17)
    seat = stream.integers(0, 2, deals)
    agreed = (seat + stream.normal(0, 1, deals) > 0.5).astype(int)
    rival = (stream.random(deals) < 0.3).astype(int)
    value = np.exp(stream.normal(5, 1, deals)).round(1)
    error = (0.5 + np.abs(stream.normal(3, 1, deals))).round(2)
    months = pd.period_range("2016-01", periods=48, freq="M")
    noise = stream.normal(0, 10, deals) + error * stream.normal(0, 1, deals)
    premium = 32 - 8 * agreed + 10 * rival - 2 * (np.log(value) - 5) + noise
    table = pd.DataFrame(
        {
            "deal_id": [f"B{at:03d}" for at in range(deals)],
            "announced_at": [f"{month}-15" for month in stream.choice(months, deals)],
            "sector": stream.choice(["paper", "glass", "dyes"], deals),
            "target_value": value,
            FEATURE: agreed,
            "vacant_seat": seat,
            "rival": rival,
            "bid_premium": premium.round(1),
            "premium_error": error,
        }
    )
    table.loc[[4, 17], "bid_premium"] = np.nan
    return table


def written(folder: Path, table: pd.DataFrame, text: str = STUDY) -> Path:
    """The list and its study file."""
    folder.mkdir(parents=True, exist_ok=True)
    table.to_csv(folder / "bids.csv", index=False)
    return write(folder / "bids.toml", text)


def changed(*pairs: tuple[str, str]) -> str:
    text = STUDY
    for old, new in pairs:
        assert old in text, old
        text = text.replace(old, new)
    return text


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return written(tmp_path_factory.mktemp("bids"), bids())


@pytest.fixture(scope="module")
def results(study: Path) -> Results:
    return run(load_study(study))[0]


@pytest.fixture(scope="module")
def pages(results: Results) -> dict[str, bytes]:
    return documents(results)


def column(results: Results, estimator: str) -> Estimate:
    (found,) = [c for c in results.columns if c.estimator == estimator]
    assert isinstance(found, Estimate)
    return found


def design_of(results: Results) -> tuple[pd.Series, pd.DataFrame]:
    """Outcome in percent and regressors, from the list itself."""
    table = bids().dropna(subset="bid_premium")
    X = pd.DataFrame({"constant": 1.0, FEATURE: table[FEATURE], "size": np.log(table.target_value)})
    return table["bid_premium"], X.assign(rival=table["rival"])


def test_least_squares_is_that_of_the_list_itself(results: Results) -> None:
    y, X = design_of(results)
    fit = sm.OLS(y, X).fit(cov_type="HC3")
    ours = column(results, "ols")
    np.testing.assert_allclose(100 * ours.coefficients, fit.params, rtol=1e-9)
    np.testing.assert_allclose(100 * ours.std_errors, fit.bse, rtol=1e-9)


def test_effects_are_those_of_dummies_and_dates_are_clusters(results: Results) -> None:
    y, X = design_of(results)
    table = bids().dropna(subset="bid_premium")
    groups = pd.get_dummies(
        table.assign(year=table.announced_at.str[:4])[["sector", "year"]],
        drop_first=True,
        dtype=float,
    )
    fit = sm.OLS(y, X.join(groups)).fit()
    ours = column(results, "fixed_effects")
    assert 100 * ours.term(FEATURE)["coefficient"] == pytest.approx(fit.params[FEATURE])
    assert ours.clusters == {"announced_at": table.announced_at.nunique()}


def test_known_errors_weigh_the_deals(results: Results) -> None:
    y, X = design_of(results)
    omega = bids().dropna(subset="bid_premium")["premium_error"] ** 2
    plain = sm.OLS(y, X).fit()
    leverage = plain.get_influence().hat_matrix_diag
    surplus = plain.ssr - omega.sum() + (omega * leverage).sum()
    own = surplus / (len(y) - X.shape[1])  # Lewis and Linzer 2005, eq. 5
    fit = sm.WLS(y, X, weights=1 / (omega + own)).fit()
    ours = column(results, "variance_weighted")
    np.testing.assert_allclose(100 * ours.coefficients, fit.params, rtol=1e-9)


def test_the_mean_is_clustered_by_date(results: Results) -> None:
    table = bids().dropna(subset="bid_premium")
    fit = sm.OLS(table.bid_premium, np.ones(len(table))).fit(
        cov_type="cluster", cov_kwds={"groups": pd.factorize(table.announced_at)[0]}
    )
    row = results.summary.iloc[0]
    assert (row["group"], row["n"]) == ("all deals", 118)
    assert 100 * row["mean"] == pytest.approx(fit.params.iloc[0])
    assert 100 * row["std_error"] == pytest.approx(fit.bse.iloc[0])
    assert results.summary["n"].iloc[1:].sum() == 118


def test_what_only_returns_can_tell_is_absent(results: Results) -> None:
    measured = {"abnormal_returns", "event_tests", "paths", "placebo", "power", "averages"}
    assert not measured & set(results.tables)
    assert results.window_tests == ()
    assert results.abnormal == {}
    names = set(results.tables["headline"]["name"])
    assert not [name for name in names if "reaction" in name and "money" not in name]
    assert set(results.specifications["outcome"]) == {"bid premium"}
    assert set(results.sensitivity["dimension"]).isdisjoint({"anticipation", "announcement day"})


def test_missing_outcomes_are_in_the_ledger(results: Results) -> None:
    told = {entry.deal: entry.rule for _, entry in results.ledger}
    assert told == {"B004": "missing_outcome", "B017": "missing_outcome"}
    assert [stage.stage for stage in results.ledger.stages] == [
        "deal list",
        "outcome",
        "regression",
    ]
    assert (results.ledger.rows_in, results.ledger.rows_kept) == (120, 118)


def words_of(document: Document) -> str:
    """All that a document says of its own: prose, headings and cells."""
    parts = [paragraph.text for paragraph in document.paragraphs]
    parts += [section.heading for section in document.sections]
    for table in document.tables:
        parts += [item.heading for item in table.columns]
        parts += [getattr(cell, "text", "") for row in table.rows for cell in row if cell]
    for figure in document.figures:
        parts += [figure.alt, figure.axis]
    return "\n".join(parts)


@pytest.mark.parametrize("kind", [report, memo])
def test_no_page_speaks_of_returns(kind: object, results: Results) -> None:
    text = words_of(kind(results))  # type: ignore[operator]
    text = text.replace("announced_at", "date")  # a column of the list, as it is called there
    assert [line for line in text.splitlines() if FOREIGN.search(line)] == []
    assert "percentage points" in text
    assert "bid premium" in text


def test_no_figure_speaks_of_returns(pages: dict[str, bytes]) -> None:
    drawn = {name: data.decode() for name, data in pages.items() if name.endswith(".svg")}
    assert len(drawn) >= 3
    for name, text in drawn.items():
        words = " ".join(re.findall(r"<text[^>]*>(.*?)</text>", text, re.DOTALL))
        assert not FOREIGN.search(words), name


def test_every_number_in_prose_stands_in_a_table(results: Results) -> None:
    number = re.compile(r"\d")
    for document in (report(results), memo(results)):
        for paragraph in document.paragraphs:
            for found in paragraph.quotes:
                frame = results.tables[found.table]
                rows = frame
                for name, key in found.where:
                    rows = rows[rows[name] == key]
                assert set(rows[found.column]) == {found.value} or np.isnan(found.value)
            own = paragraph.own_text
            for quoted in paragraph.quotes:
                own = own.replace(quoted.text, "", 1)
            assert not number.search(own), own


def test_the_finding_is_in_percentage_points(results: Results) -> None:
    text = next(report(results).paragraphs).text
    mean = 100 * results.summary["mean"].iloc[0]
    effect = 100 * column(results, "two_stage_least_squares").term(FEATURE)["coefficient"]
    assert f"The mean bid premium was {mean:.1f}% (95% interval " in text
    assert f"{effect:.1f} percentage points".replace("-", "−") in text
    assert "At the median target's value (EUR " in text


def test_money_is_the_premium_on_the_targets_value(results: Results) -> None:
    frame = results.tables["headline"].set_index("name")["value"]
    kept = bids().dropna(subset="bid_premium")
    assert frame["median_market_value"] == pytest.approx(kept["target_value"].median())
    assert frame["feature_money"] == pytest.approx(
        frame["feature_effect"] * kept["target_value"].median()
    )


def test_the_workbook_and_the_memo_hold_the_outcome(pages: dict[str, bytes]) -> None:
    sheets = pd.read_excel(io.BytesIO(pages["tables.xlsx"]), sheet_name=None, header=None)
    assert "outcome" in sheets
    assert not {"windows", "tests", "placebo"} & set(sheets)
    with zipfile.ZipFile(io.BytesIO(pages["memo.docx"])) as word:
        assert "The bid premium over deals" in word.read("word/document.xml").decode()


@pytest.mark.parametrize(
    "unit, made",
    [
        ("decimal", lambda table, name: table[name] / 100),
        ("basis points", lambda table, name: table[name] * 100),
        ("price ratio", lambda table, name: table[name] / 100 + (name == "bid_premium")),
    ],
)
def test_units_change_no_number(unit: str, made: object, tmp_path: Path, results: Results) -> None:
    table = bids()
    for name in ("bid_premium", "premium_error"):
        table[name] = made(bids(), name)  # type: ignore[operator]
    quick = changed(('"percent"', f'"{unit}"'), ("[scrutiny]", "[scrutiny]\nrun = false"))
    other = run(load_study(written(tmp_path, table, quick)))[0]
    for ours, theirs in zip(other.columns, results.columns, strict=True):
        assert isinstance(ours, Estimate)
        assert isinstance(theirs, Estimate)
        np.testing.assert_allclose(ours.coefficients, theirs.coefficients, rtol=1e-9, atol=1e-12)
    printed = next(report(other).paragraphs).text
    assert (" bp (" in printed) == (unit == "basis points")


def test_an_outcome_in_money_is_printed_as_money(tmp_path: Path) -> None:
    text = changed(
        ('"percent"', '"money"\nlabel = "break fee"'),
        ('share_of = "target_value"\n', ""),
        ("[scrutiny]", "[scrutiny]\nrun = false"),
    )
    made = run(load_study(written(tmp_path, bids(), text)))[0]
    printed = next(report(made).paragraphs).text
    assert f"The mean break fee was EUR {made.summary['mean'].iloc[0]:.1f} million" in printed
    assert "%" not in printed.replace("95%", "")
    assert not made.tables["headline"]["name"].str.contains("money").any()


def test_a_study_of_the_mean_alone(tmp_path: Path) -> None:
    text = STUDY[: STUDY.index("[characteristics")] + '[report]\nformats = ["html"]\n'
    made = run(load_study(written(tmp_path, bids(), text.replace("share_of", "# share_of"))))[0]
    assert made.columns == ()
    assert made.summary["group"].tolist() == ["all deals"]
    assert "report.html" in documents(made)
    assert "The mean bid premium was" in next(report(made).paragraphs).text


def test_check_tells_of_the_unit_before_anything_is_estimated(tmp_path: Path) -> None:
    path = written(tmp_path, bids(), changed(('"percent"', '"decimal"')))
    with pytest.raises(InputProblem) as caught:
        check(load_study(path))
    assert [finding.rule for finding in caught.value.findings] == ["outcome_unit"]


def test_candidates_serve_the_selection_model(tmp_path: Path) -> None:
    table = bids().assign(security=lambda made: "T" + made.index.astype(str))
    years = table.announced_at.str[:4].astype(int)
    stream = np.random.default_rng(5)
    quiet = pd.DataFrame({"security": [f"Q{at}" for at in range(240)], "deal_id": ""})
    made = pd.DataFrame({"security": table.security, "deal_id": table.deal_id, "year": years})
    every = pd.concat([made, quiet.assign(year=2017)], ignore_index=True)
    every = every.assign(
        exchange="XLON",
        as_of=every["year"].astype(str) + "-01-01",
        cash=stream.normal(0, 1, len(every)),
        for_sale=stream.normal(0, 1, len(every)) + (every["deal_id"] != ""),
    )
    every.to_csv(tmp_path / "candidates.csv", index=False)
    selection = """
[selection]
explained_by = ["cash"]
excluded = ["for_sale"]
rationale = "Owners put their companies up for sale for reasons of their own."
"""
    text = changed(
        ('deals = "bids.csv"', 'deals = "bids.csv"\ncandidates = "candidates.csv"'),
        ('"two_stage_least_squares"', '"heckman_two_step"'),
        ("[scrutiny]", selection + "[scrutiny]\nrun = false"),
    )
    found = run(load_study(written(tmp_path, table, text)))[0]
    heckman = column(found, "heckman_two_step")
    assert heckman.n == 118
    assert heckman.stages[0].n == 358  # the two deals without a premium announced, and left


def test_bounds_speak_of_deals_whose_outcome_is_missing(tmp_path: Path) -> None:
    asked = """[bounds]
draws = 99
rationale = "Which premiums were published has nothing to do with the choice."
"""
    table = bids()
    table.loc[table[FEATURE].eq(1) & (table.index % 4 == 0), "bid_premium"] = np.nan
    text = changed(("[scrutiny]", asked + "[scrutiny]\nrun = false"))
    found = run(load_study(written(tmp_path, table, text)))[0]
    assert len(found.tables["bounds"])
    assert "announced" not in words_of(report(found)).replace("announced_at", "date")


def screen(*arguments: str | Path, expect: int = 0) -> Result:
    before = signal.getsignal(signal.SIGTERM)
    done = CliRunner().invoke(app, [*map(str, arguments)])
    signal.signal(signal.SIGTERM, before)
    assert done.exit_code == expect, done.output
    return done


def test_commands_tell_a_deal_and_refuse_power(study: Path, tmp_path: Path) -> None:
    table = bids().set_index("deal_id")
    rank = 1 + int((table.bid_premium > table.bid_premium["B003"]).sum())
    told = screen("deal", study, "B003").stdout
    assert f"Bid premium {table.bid_premium['B003']:.1f}%" in told
    assert f"rank {rank} of 118" in " ".join(told.split())
    lost = screen("deal", study, "B004").stdout
    assert "No outcome for the deal" in lost
    content = json.loads(screen("deal", study, "B003", "--json").stdout)
    assert content["story"]["rank"] == rank
    refused = screen("power", study, expect=2)
    assert "outcome_and_returns" in refused.stderr
    refused = screen("run", study, "--window", "-3:3", "--out", tmp_path / "out", expect=2)
    assert "outcome_and_returns" in refused.stderr
    assert not (tmp_path / "out").exists()


def test_a_run_leaves_documents_data_and_manifest(tmp_path: Path) -> None:
    quick = changed(
        ("[scrutiny]", "[scrutiny]\nrun = false"), ("[report]", '[report]\nformats = ["html"]')
    )
    done = dealwake("run", written(tmp_path, bids(), quick), "--out", tmp_path / "out")
    assert "The mean bid premium was" in " ".join(done.stdout.split())
    manifest = json.loads((tmp_path / "out" / "manifest.json").read_text())
    assert manifest["study"]["outcome"]["unit"] == "percent"
    assert list(manifest["inputs"]) == ["deals"]
    saved = pd.read_parquet(tmp_path / "out" / "data" / "estimates.parquet")
    assert set(saved["outcome"]) == {"bid_premium"}
    assert "window_start" not in saved


def test_two_runs_are_compared_in_the_outcomes_unit(tmp_path: Path) -> None:
    quiet = ("[scrutiny]", "[scrutiny]\nrun = false")
    short = ("[report]", '[report]\nformats = ["html"]')
    money = ('"percent"', '"money"'), ('share_of = "target_value"\n', "")
    for name, more in (("one", ()), ("two", (('["size", "rival"]', '["size"]'),)), ("fee", money)):
        path = written(tmp_path / name, bids(), changed(quiet, short, *more))
        screen("run", path, "--out", tmp_path / f"run_{name}")
    done = screen(
        "contrast", tmp_path / "run_one", tmp_path / "run_two", "--out", tmp_path / "both"
    )
    text = " ".join(done.stdout.split())
    mean = 100 * pd.read_parquet(tmp_path / "run_one" / "data" / "summary.parquet")["mean"][0]
    assert f"The mean bid premium was {mean:.2f}%" in text
    assert " pp " in text
    assert " bp " not in text
    refused = screen("contrast", tmp_path / "run_one", tmp_path / "run_fee", expect=2)
    assert "different_outcomes" in refused.stderr
