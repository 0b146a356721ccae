"""What the finding says first, how long it may be, and how the grade follows from its rule."""

from __future__ import annotations

from dataclasses import replace

import pandas as pd
import pytest

from pipeline.core.estimate import Shape, Withheld
from pipeline.core.results import Results
from pipeline.report.document import Callout
from pipeline.report.finding import LIMIT, finding, finding_section, finding_text, threat
from pipeline.report.grade import RULE, grade
from pipeline.report.material import Material
from tests.report.runs import estimate, full_run, shaped, with_columns, with_frames, with_tests

LONG = "a feature of the deal whose name goes on and on for a good many words indeed"


def calm() -> Results:
    """A run in which nothing warns, two columns agree and two tests agree."""
    run = with_tests(full_run(), 0.001, 0.002)
    run = with_columns(run, estimate("First", -0.01), estimate("Second", -0.02))
    return with_frames(replace(run, diagnostics=run.diagnostics.iloc[:0]))


def graded(run: Results) -> str:
    return grade(Material.of(run)).letter


def verdicts(run: Results, *found: str) -> Results:
    row = {"subject": "S", "check": "C", "value": 1.0, "threshold": "", "meaning": "M.",
           "source": ""}  # fmt: skip
    frame = pd.DataFrame([{**row, "verdict": verdict} for verdict in found])
    return with_frames(replace(run, diagnostics=frame))


def longwinded() -> Results:
    run = full_run()
    labels = {**run.study.labels, "paid_in_shares": LONG}
    columns = [replace(c, estimand=f"{LONG}, {LONG}") for c in run.columns if hasattr(c, "names")]
    study = replace(run.study, labels=labels, headline_test_reason=f"{LONG}; {LONG}")
    return with_columns(replace(run, study=study), *columns, lead=2)


@pytest.mark.parametrize(
    "run", [full_run(), calm(), longwinded(), *(shaped(shape) for shape in Shape)]
)
def test_the_finding_stays_within_its_limit(run: Results) -> None:
    assert len(finding_text(run).split()) <= LIMIT == 120


def test_what_is_moved_out_of_the_finding_is_said_below_it() -> None:
    run = longwinded()
    _, moved = finding(Material.of(run))
    assert moved
    section = finding_section(Material.of(run))
    text = " ".join(item.text for item in section.blocks[1].items)  # type: ignore[union-attr]
    assert run.study.headline_test_reason in text
    assert LONG in text


def test_a_short_finding_holds_reason_and_estimand() -> None:
    run = with_columns(calm(), estimate("First", -0.01, estimand="a short one"))
    text = finding_text(run)
    assert "chosen because it allows for deals that move together" in text
    assert "it estimates: a short one" in text
    assert "is associated with" in text


@pytest.mark.parametrize(("dated", "words"), [(1, "1 deal."), (3, "3 deals."), (0, "")])
def test_unknown_times_are_said(dated: int, words: str) -> None:
    run = full_run()
    timing = ["date only"] * dated + ["during the session"] * (len(run.deals) - dated)
    text = finding_text(with_frames(replace(run, deals=run.deals.assign(timing=timing))))
    assert (f"Time unknown: {words}" in text) == bool(dated)
    assert ("Time unknown" in text) == bool(dated)


def test_columns_that_differ_in_sign_are_said_first() -> None:
    run = with_columns(calm(), estimate("First", -0.01), estimate("Second", 0.02))
    assert finding_text(run).startswith("The columns differ in sign.")
    assert not finding_text(calm()).startswith("The columns differ in sign.")


@pytest.mark.parametrize(
    "p_values, words",
    [
        ((0.001, 0.2), "Tests disagree: 1 of the 2 valid here reject"),
        ((0.001, 0.002), "All 2 tests valid here reject"),
        ((0.3, 0.2), "None of 2 tests valid here rejects"),
        ((0.3,), "The one test valid here does not reject"),
        ((0.05, 0.04), "Tests disagree: 1 of the 2 valid here reject"),
    ],
)
def test_agreement_of_the_tests(p_values: tuple[float, ...], words: str) -> None:
    assert f"{words} a zero mean at 5%" in finding_text(with_tests(full_run(), *p_values))


def test_range_of_the_other_columns() -> None:
    assert "The one other column gives −200 bp" in finding_text(calm())
    three = with_columns(calm(), *(estimate(t, e) for t, e in
                                   (("A", -0.01), ("B", -0.03), ("C", -0.02))))  # fmt: skip
    assert "The 2 other columns run from −300 to −200 bp" in finding_text(three)
    alone = with_columns(calm(), estimate("A", -0.01))
    assert "No other column holds a number" in finding_text(alone)


def test_money_is_the_effect_at_the_median_market_value() -> None:
    run = calm()
    median = run.deals["market_value"].median()
    text = finding_text(run)
    assert f"(USD {median:,.0f} million)" in text
    assert f"USD −{0.01 * median:,.1f} million" in text


@pytest.mark.parametrize("drop", ["currency", "values", "mixed"])
def test_no_money_without_a_currency_or_values(drop: str) -> None:
    run = calm()
    if drop == "currency":
        run = replace(run, study=replace(run.study, currency=""))
    elif drop == "values":
        run = replace(run, deals=run.deals.drop(columns="market_value"))
    else:
        codes = ["USD", "JPY"] * (len(run.deals) // 2)
        run = replace(run, deals=run.deals.assign(currency=codes))
    assert "market value" not in finding_text(run)


def test_a_withheld_lead_is_said_with_its_reason() -> None:
    run = with_columns(calm(), Withheld("w", "Lead", "only one cluster"), estimate("B", -0.01))
    assert "“Lead”, gives no number: only one cluster" in finding_text(run)


def test_the_main_threat_is_the_failed_check_in_words() -> None:
    found = threat(Material.of(full_run()))
    assert "the instrument is weak: “treasury shares”" in (
        found if isinstance(found, str) else found.text
    )
    assert "Main threat: companies choose the feature" in finding_text(calm())


@pytest.mark.parametrize(
    "letter, run",
    [
        ("A", calm()),
        ("B", verdicts(calm(), "warn")),
        ("B", with_columns(calm(), estimate("Alone", -0.01))),
        ("C", verdicts(calm(), "warn", "fail")),
        ("C", with_columns(calm(), estimate("A", -0.01), estimate("B", 0.01))),
        ("C", with_tests(calm(), 0.01)),
        ("D", with_tests(calm(), 0.001, 0.9)),
        ("D", with_columns(calm(), Withheld("w", "W", "none"), estimate("B", -0.01))),
        ("D", shaped(Shape.RAYS)),
        ("D", shaped(Shape.LINE)),
        ("D", shaped(Shape.EMPTY)),
    ],
)
def test_the_grade_follows_its_rule(letter: str, run: Results) -> None:
    assert graded(run) == letter
    assert finding_text(run).endswith(f"Confidence grade: {letter}.")


def test_a_variant_of_another_sign_costs_the_a() -> None:
    run = calm()
    frame = run.sensitivity.assign(estimate=[-0.01, 0.004, -0.01])
    assert graded(with_frames(replace(run, sensitivity=frame))) == "B"


def test_the_grade_is_printed_with_its_rule_and_reasons() -> None:
    section = finding_section(Material.of(full_run()))
    callout = next(block for block in section.blocks if isinstance(block, Callout))
    texts = [paragraph.text for paragraph in callout.paragraphs]
    assert callout.heading == "Confidence grade D"
    assert RULE in texts
    assert any("not a bounded interval" in text for text in texts)
