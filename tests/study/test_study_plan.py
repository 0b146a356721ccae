"""What a study asks of each stage, in the stages' own terms."""

from __future__ import annotations

from pathlib import Path

import pytest

from pipeline.characteristics.design import Roles
from pipeline.core.window import Window
from pipeline.study import plan
from pipeline.study.load import load_study
from pipeline.study.schema import Study
from tests.study.studies import BASE, loaded, write

MORE = """
[characteristics.in_cash]
indicator = { column = "payment", equals = "cash" }

[characteristics.heavy]
indicator = { column = "leverage", above = 0.6 }

[characteristics.lagged]
column = "cash"
lag = 1
standardise = true

[inputs.columns.deals]
announced_at = "Announced"

[inputs.sheets]
deals = "Deals"
"""


@pytest.fixture
def study(tmp_path: Path) -> Study:
    return loaded(tmp_path)


def test_sources_carry_columns_and_sheets(tmp_path: Path) -> None:
    study = load_study(write(tmp_path / "study.toml", BASE + MORE))
    found = plan.sources(study)
    assert list(found) == ["deals", "prices", "benchmarks", "candidates"]
    assert found["deals"].columns == {"announced_at": "Announced"}
    assert found["deals"].file == "deals.xlsx, sheet Deals"
    assert found["prices"].columns == {}


def test_candidates_are_read_for_a_selection_model_only(tmp_path: Path) -> None:
    start, end = BASE.index("[selection]"), BASE.index("[instruments]")
    study = load_study(write(tmp_path / "study.toml", BASE[:start] + BASE[end:]))
    assert "candidates" not in plan.sources(study)
    assert plan.wanted(study).candidate_numbers == ()


def test_characteristics_become_recipes(tmp_path: Path) -> None:
    study = load_study(write(tmp_path / "study.toml", BASE + MORE))
    book = plan.recipes(study)
    assert book["relative_size"].source == "ratio"
    assert book["relative_size"].columns == ("deal_value", "market_value")
    assert book["relative_size"].log
    assert (book["run_up"].measure, book["run_up"].window) == ("run_up", Window(-25, -11))
    assert (book["in_cash"].columns, book["in_cash"].equals) == (("payment",), "cash")
    assert book["heavy"].above == 0.6
    assert (book["lagged"].lag, book["lagged"].standardise) == (1, True)


def test_a_price_measure_without_a_window_looks_at_the_estimation_window(tmp_path: Path) -> None:
    study = loaded(tmp_path, ("window = [-25, -11]", ""))
    assert plan.recipes(study)["run_up"].window == Window(-150, -31)


def test_roles_of_a_study(study: Study) -> None:
    assert plan.roles(study) == Roles(
        outcome="car_m1_1",
        outcome_label="CAR[-1, +1]",
        treatment="shares",
        controls=("relative_size", "leverage"),
        effects=("industry",),
        clusters=("security",),
        instruments=("spare",),
        selection=("leverage", "run_up"),
        excluded=("for_sale",),
    )


def test_wanted_are_the_raw_columns_behind_the_variables(tmp_path: Path) -> None:
    text = (BASE + MORE).replace(
        'controls = ["relative_size"', 'controls = ["big", "in_cash", "relative_size"'
    )
    found = plan.wanted(load_study(write(tmp_path / "study.toml", text)))
    # Of the interaction only what it multiplies is read, of the price measure nothing.
    assert set(found.deal_numbers) == {
        "shares", "deal_value", "market_value", "cash", "leverage", "spare",
    }  # fmt: skip
    assert set(found.deal_texts) == {"payment", "industry", "security"}
    assert set(found.candidate_numbers) == {"leverage", "for_sale"}


def test_a_study_of_the_mean_alone_wants_no_more_than_the_fixed_columns(tmp_path: Path) -> None:
    text = BASE[: BASE.index("[regression]")]
    study = load_study(write(tmp_path / "study.toml", text))
    assert plan.roles(study) is None
    assert plan.wanted(study).deal_numbers == ()
    assert plan.facts(study, "dependence_adjusted", study.event_time.all_windows).treatment == ""


@pytest.mark.parametrize(
    ("windows", "estimation", "span", "path"),
    [
        ("[[0, 1], [-5, 5]]", -31, Window(-10, 10), Window(-10, 10)),
        ("[[0, 25]]", -31, Window(-10, 25), Window(-10, 10)),
        ("[[-20, 2]]", -31, Window(-20, 10), Window(-10, 10)),
        ("[[0, 1]]", -6, Window(-5, 10), Window(-5, 10)),
    ],
)
def test_days_held_and_days_drawn(
    windows: str, estimation: int, span: Window, path: Window, tmp_path: Path
) -> None:
    """Every window and the path, but never a day that estimation used."""
    study = loaded(
        tmp_path,
        ("[[0, 1], [-5, 5]]", windows),
        ("[-150, -31]", f"[-150, {estimation}]"),
        ("window = [-25, -11]", "window = [-60, -31]"),
    )
    assert plan.span(study) == span
    assert plan.path_days(study) == path
    assert plan.event_options(study).span == span


def test_event_options_repeat_the_study(study: Study) -> None:
    options = plan.event_options(study)
    assert (options.estimation, options.headline) == (Window(-150, -31), Window(-1, 1))
    assert (options.minimum_observations, options.mask_sessions) == (100, 5)
    assert (options.cutoff_minutes, options.confounding_days) == (0, 1)


def test_facts_for_the_report(study: Study) -> None:
    facts = plan.facts(study, "dependence_adjusted", study.event_time.all_windows)
    assert facts.windows == study.event_time.all_windows
    assert facts.regressors == ("shares", "relative_size", "leverage")
    assert facts.words("relative_size") == "Relative size"
    assert list(facts.rationales.values()) == [
        "Divisions come up for sale for reasons of their sellers.",
        "Spare shares were left over before the deal was conceived.",
    ]
    assert facts.headline_test_reason
    assert any("at least 100 returns" in note for note in facts.notes)
    assert any("80%" in note for note in facts.notes)
    assert all(note.endswith(".") for note in facts.notes)


def test_columns_of_the_comparison(tmp_path: Path) -> None:
    """All that the study allows, or those named, once each."""
    assert loaded(tmp_path).columns == (
        "ols", "fixed_effects", "heckman_two_step", "two_stage_least_squares",
    )  # fmt: skip
    named = ('clusters = ["security"]', 'clusters = []\ncolumns = ["ols", "ols"]')
    assert loaded(tmp_path, named).columns == ("ols",)
    without = ('fixed_effects = ["industry"]', "")
    assert "fixed_effects" not in loaded(tmp_path, without).columns


def test_a_date_alone_never_stands_on_day_zero_alone(study: Study) -> None:
    def with_windows(headline: list[int], *others: list[int]) -> Study:
        time = study.event_time.model_copy(update={"headline": headline, "windows": [*others]})
        return study.model_copy(update={"event_time": time})

    alone = with_windows([0, 0], [-2, -1])
    assert plan.windows(alone, date_only=False) == (Window(0, 0), Window(-2, -1))
    assert plan.windows(alone, date_only=True)[-1] == Window(0, 1)
    covered = with_windows([0, 0], [-1, 1])
    assert Window(0, 1) not in plan.windows(covered, date_only=True)


def test_further_variables_the_instruments_move(tmp_path: Path) -> None:
    more = ('use = ["spare"]', 'use = ["spare", "urgent"]\nalso_for = ["relative_size"]')
    study = loaded(tmp_path, more, ("[selection]", "[fit]\nbootstrap_draws = 99\n\n[selection]"))
    parts = plan.roles(study)
    assert parts is not None
    assert parts.also_endogenous == ("relative_size",)
    assert plan.fit_options(study).draws == 99
    assert loaded(tmp_path).instruments is not None
