"""What it would take: the paragraph by rule, the picture, the tables, and where numbers stand."""

from __future__ import annotations

import math
import warnings
from dataclasses import replace
from xml.etree import ElementTree

import numpy as np
import pandas as pd
import pytest

from pipeline.core.results import Results
from pipeline.report.content import report
from pipeline.report.document import Callout, Figure, Paragraph, Section, Table
from pipeline.report.figures import svg
from pipeline.report.material import Material
from pipeline.report.memo import memo
from pipeline.report.overturn import overturn_section, survival_section, verdict
from tests.report.doubted import BASE, LEAD, doubted_run, no_ends, with_breakdowns
from tests.report.runs import full_run

FIGURES = {"assumptions", "hidden_factors", "added_error_run_up", "violations"}
TABLES = {
    "breakdowns", "hidden_strengths", "largest_r2", "controls_left_out", "both_ways",
    "expectations", "left_out",
}  # fmt: skip


def section(run: Results) -> Section:
    found = overturn_section(Material.of(run))
    assert found is not None
    return found


def text(run: Results) -> str:
    return verdict(Material.of(run)).text


def test_a_run_without_doubts_has_no_section() -> None:
    material = Material.of(full_run())
    assert overturn_section(material) is None
    assert survival_section(material) is None


def test_every_part_is_there() -> None:
    blocks = section(doubted_run()).blocks
    assert {b.name for b in blocks if isinstance(b, Figure)} == FIGURES
    assert {b.name for b in blocks if isinstance(b, Table)} == TABLES
    assert isinstance(blocks[0], Callout)


def test_it_stands_in_report_and_memo() -> None:
    heading = "What it would take to overturn the finding"
    run = doubted_run()
    assert heading in [part.heading for part in report(run).sections]
    told = [part for part in memo(run).sections if part.heading == "Does the finding survive"]
    (paragraph,) = told[0].blocks
    assert isinstance(paragraph, Paragraph)
    assert paragraph.text == text(run)


def test_an_instrumented_effect_whose_set_holds_zero() -> None:
    run = with_breakdowns(
        (BASE, "confounder_interval", 0.253),
        (LEAD, "exclusion_zero", 0.0),
        (LEAD, "exclusion_least_squares", 0.312),
        (LEAD, "exclusion_difference", 0.92),
    )
    told = text(run)
    assert "That there is an effect at all does not stand" in told
    assert "it falls if the instruments do 31% of it by another way" in told
    assert "Least squares itself does not survive" in told
    assert "unless the instruments do 92% of it" in told
    assert "a hidden factor explains 25% of what is left" in told
    assert "carries the finding: nothing speaks against exclusion zero" in told
    assert "Confidence grade: " in told


def test_an_instrumented_effect_that_stands() -> None:
    told = text(
        with_breakdowns(
            (BASE, "confounder_interval", 0.0),
            (LEAD, "exclusion_zero", 0.04),
            (LEAD, "exclusion_least_squares", 0.0),
            (LEAD, "exclusion_difference", 0.0),
        )
    )
    assert (
        "That there is an effect at all stands only just; it falls if the instruments do 4.0%"
        in told
    )
    assert "does not stand: the set holds that too" in told
    assert "The least-squares interval holds zero as it is" in told


def test_least_squares_that_nothing_contradicts() -> None:
    told = text(
        with_breakdowns(
            (BASE, "confounder_interval", 0.11),
            (LEAD, "exclusion_zero", 0.5),
            (LEAD, "exclusion_least_squares", 0.0),
            (LEAD, "exclusion_difference", 0.0),
        )
    )
    assert "hardly contradict least squares; its interval holds zero if a hidden factor" in told
    assert "does not survive" not in told


def test_a_finding_without_instruments_that_survives_names_what_is_nearest() -> None:
    told = text(
        with_breakdowns(
            (LEAD, "confounder_interval", 0.3),
            (LEAD, "hidden_odds", 1.8),
            (LEAD, "fewest_deals", math.inf),
            lead_instrumented=False,
        )
    )
    assert "survives every doubt put to it" in told
    assert "Nearest to overturning it: one of two like deals is 1.80 times as likely" in told
    assert "carries the finding: nothing speaks against hidden odds" in told


def test_a_finding_that_gives_way_says_to_what() -> None:
    told = text(
        with_breakdowns(
            (LEAD, "confounder_interval", 0.01),
            (LEAD, "hidden_odds", 4.0),
            (LEAD, "fewest_deals", 0.021),
            lead_instrumented=False,
        )
    )
    assert "does not survive every doubt" in told
    assert "It falls if a hidden factor explains 1.0% of what is left" in told
    assert "It falls if 2.1% of the deals are left out" in told
    assert "Nearest" not in told


def test_what_no_strength_overturns_is_said_in_words() -> None:
    told = text(
        with_breakdowns(
            (LEAD, "fewest_deals", math.inf), (LEAD, "hidden_odds", math.inf),
            lead_instrumented=False,
        )
    )  # fmt: skip
    assert "nothing of this kind is enough" in told
    assert "inf" not in told.replace("infinite", "").split()


def test_a_lead_that_was_put_to_no_doubt_says_so() -> None:
    told = text(with_breakdowns((BASE, "confounder_interval", 0.3), (BASE, "hidden_odds", 1.6)))
    assert told.startswith("What would overturn the column that leads was not computed")
    assert "carries the finding: nothing speaks against hidden odds" in told


def test_numbers_of_the_paragraph_stand_in_the_table() -> None:
    run = doubted_run()
    frame = run.tables["breakdowns"]
    quotes = verdict(Material.of(run)).quotes
    assert quotes
    for found in quotes:
        assert found.table == "breakdowns"
        where = dict(found.where)
        row = frame[(frame["target"] == where["target"]) & (frame["key"] == where["key"])]
        assert row["value"].iloc[0] == found.value
        shown = float(found.text.replace("−", "-"))
        assert shown == pytest.approx(found.value * found.scale, abs=0.5 * 10.0**-found.digits)


def drawn(run: Results, name: str) -> pd.DataFrame:
    return next(b for b in section(run).blocks if isinstance(b, Figure) and b.name == name).data


def test_the_picture_holds_the_harshest_of_each_assumption_in_order() -> None:
    run = doubted_run()
    data = drawn(run, "assumptions")
    assert data["estimate_bp"].is_monotonic_increasing
    assert data["reported"].sum() == 2
    assert set(data.loc[data["reported"], "lead"]) == {True, False}
    for target, lead in ((BASE, False), (LEAD, True)):
        rows = run.sensitivity[run.sensitivity["target"] == target]
        own = data[(data["lead"] == lead) & ~data["reported"]]
        assert len(own) == rows["dimension"].nunique()
        sign = np.sign(data.loc[data["reported"] & (data["lead"] == lead), "estimate_bp"].iloc[0])
        harshest = (sign * rows.groupby("dimension")["estimate"].agg(
            lambda v, s=sign: (s * v).min() * s)).sort_values()  # fmt: skip
        assert np.allclose(np.sort(sign * own["estimate_bp"]), harshest.to_numpy() * 1e4)


@pytest.mark.parametrize("run", [doubted_run(), no_ends(doubted_run())], ids=["ends", "no ends"])
def test_figures_are_well_formed_and_named(run: Results) -> None:
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        for block in section(run).blocks:
            if isinstance(block, Figure):
                page = svg(block)
                ElementTree.fromstring(page)
                assert svg(block) == page
                assert block.alt.endswith(".")
                assert "nan" not in block.alt


def test_the_contour_meets_the_least_squares_effect_at_no_strength() -> None:
    run = doubted_run()
    data = drawn(run, "hidden_factors")
    origin = data[(data["with_treatment"] == 0) & (data["with_outcome"] == 0)]["estimate_bp"]
    own = run.columns[0].term("paid_in_shares")["coefficient"]  # type: ignore[union-attr]
    assert origin.iloc[0] == pytest.approx(1e4 * own, rel=1e-9)
    assert (data["label"] != "").any()


def test_each_variant_stays_in_the_table_though_not_in_a_picture_of_its_own() -> None:
    run = doubted_run()
    names = {figure.name for figure in report(run).figures}
    assert "sensitivity" in names
    assert not {name for name in names if name.startswith("sensitivity_")}
    (table,) = (t for t in report(run).tables if t.name == "sensitivity")
    assert len(table.rows) == len(run.sensitivity)


@pytest.mark.parametrize(
    ("low", "high", "told"),
    [(-1.0, 2.0, "cannot be told from nothing"), (0.1, 0.9, "choice up"), (-0.9, -0.1, "down")],
)
def test_the_way_the_answer_pushes_least_squares(low: float, high: float, told: str) -> None:
    run = doubted_run()
    frame = run.tables["both_ways"].copy()
    first = frame[frame["equation"] == "choice"]["term"].iloc[0]
    answer = (frame["equation"] == "choice") & (frame["term"] == first)
    frame.loc[answer, ["coefficient", "ci_low", "ci_high"]] = [(low + high) / 2, low, high]
    changed = replace(run, tables={**run.tables, "both_ways": frame})
    (table,) = (
        b for b in section(changed).blocks if isinstance(b, Table) and b.name == "both_ways"
    )
    assert told in table.notes[0].text


def title_of(run: Results, name: str) -> str:
    return next(
        b.title.text for b in section(run).blocks if isinstance(b, Figure) and b.name == name
    )


def with_frame(run: Results, name: str, **columns: object) -> Results:
    return replace(run, tables={**run.tables, name: run.tables[name].assign(**columns)})


def test_the_pictures_say_by_rule_what_was_found() -> None:
    """Each title follows the numbers to its other wording."""
    run = doubted_run()
    reported = run.tables["reported"]
    kept = with_frame(run, "reported", estimate=reported["estimate"].abs() * -1)
    turned = with_frame(run, "reported", estimate=reported["estimate"].abs())
    titles = {title_of(one, "assumptions") for one in (kept, turned)}
    assert len(titles) == 2
    assert any("changes sign" in title for title in titles)
    holding = with_frame(run, "violations", ci_low=-1.0, ci_high=1.0)
    clear = with_frame(run, "violations", ci_low=-1.0, ci_high=-0.5)
    assert "holds zero even if" in title_of(holding, "violations")
    assert "stays clear of zero at every share" in title_of(clear, "violations")
    added = run.tables["extrapolation"]
    name = "added_error_run_up"
    far = added["estimate"].where(added["curve"] == "simulated", 9 * added["estimate"].max())
    near = added["estimate"].where(added["curve"] == "simulated", added["estimate"].max() / 99)
    sign = np.sign(added.loc[added["zeta"] == 0, "estimate"].mean())
    assert title_of(with_frame(run, "extrapolation", estimate=sign * far.abs()), name).endswith(
        "further from zero"
    )
    assert title_of(with_frame(run, "extrapolation", estimate=sign * near.abs()), name).endswith(
        "nearer to zero"
    )
