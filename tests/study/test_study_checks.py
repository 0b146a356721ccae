"""What no single key can get wrong: windows, roles and parts that do not fit one another."""

from __future__ import annotations

from pathlib import Path

import pytest

from pipeline.study.load import load_study
from tests.study.studies import BASE, changed, loaded, one_refusal, refused, write


def test_the_base_itself_is_sound(tmp_path: Path) -> None:
    assert loaded(tmp_path).title == "Base"


@pytest.mark.parametrize(
    ("old", "new", "window"),
    [
        ("headline = [-1, 1]", "headline = [-40, 1]", "[-40, +1]"),
        ("[[0, 1], [-5, 5]]", "[[0, 1], [-31, 5]]", "[-31, +5]"),
        ("[[0, 1], [-5, 5]]", "[[0, 1], [-200, -160]]", "[-200, -160]"),
    ],
)
def test_event_windows_keep_off_the_estimation_window(
    old: str, new: str, window: str, tmp_path: Path
) -> None:
    """Days that the announcement may have moved must not say what is normal: MacKinlay 1997."""
    text = changed((old, new), ("window = [-25, -11]", "window = [-250, -240]"))
    (finding,) = refused(write(tmp_path / "study.toml", text))
    assert (finding.rule, finding.column) == ("overlapping_windows", "event_time")
    assert window in finding.got
    assert "[-150, -31]" in finding.got


def test_windows_next_to_the_estimation_window_are_allowed(tmp_path: Path) -> None:
    text = (("[[0, 1], [-5, 5]]", "[[-30, -2]]"), ("window = [-25, -11]", "window = [-60, -31]"))
    assert loaded(tmp_path, *text).event_time.windows == [[-30, -2]]


def test_more_observations_than_sessions(tmp_path: Path) -> None:
    finding = one_refusal(tmp_path, ("minimum_observations = 100", "minimum_observations = 121"))
    assert finding.column == "event_time.minimum_observations"
    assert "at most 120" in finding.expected


@pytest.mark.parametrize("window", ["[-25, -5]", "[-25, 0]", "[1, 5]"])
def test_a_control_measured_during_the_event(window: str, tmp_path: Path) -> None:
    finding = one_refusal(tmp_path, ("window = [-25, -11]", f"window = {window}"))
    assert finding.rule == "overlapping_windows"
    assert finding.column == "characteristics.run_up.window"
    assert "before -5" in finding.expected


@pytest.mark.parametrize(
    ("old", "new"),
    [
        ('controls = ["relative_size"', 'controls = ["spare", "relative_size"'),
        ('fixed_effects = ["industry"]', 'fixed_effects = ["spare"]'),
        ('use = ["spare"]', 'use = ["shares"]'),
    ],
)
def test_an_instrument_that_also_explains_the_outcome(old: str, new: str, tmp_path: Path) -> None:
    finding = one_refusal(tmp_path, (old, new))
    assert (finding.rule, finding.column) == ("instrument_is_control", "instruments.use")


def test_an_instrument_for_another_variable(tmp_path: Path) -> None:
    finding = one_refusal(tmp_path, ('for = "shares"', 'for = "cash"'))
    assert (finding.rule, finding.column) == ("bad_value", "instruments.for")


USE, ALSO = 'use = ["spare"]', 'use = ["spare", "urgent"]\nalso_for = ["relative_size"]'


def test_further_variables_of_the_instruments_are_controls(tmp_path: Path) -> None:
    finding = one_refusal(tmp_path, (USE, ALSO.replace("relative_size", "unknown")))
    assert (finding.rule, finding.column) == ("bad_value", "instruments.also_for")
    assert "'unknown'" in finding.got


def test_fewer_instruments_than_variables_are_counted(tmp_path: Path) -> None:
    finding = one_refusal(tmp_path, (USE, USE + '\nalso_for = ["relative_size"]'))
    assert (finding.rule, finding.column) == ("under_identified", "instruments.use")
    assert finding.got == "1 for 2 variables (shares, relative_size)"
    assert finding.expected == "at least 2 instruments"


def test_columns_made_for_one_variable(tmp_path: Path) -> None:
    columns = 'treatment = "shares"\ncolumns = ["treatment_two_step"]'
    finding = one_refusal(
        tmp_path, (USE, ALSO), ('[regression]\ntreatment = "shares"', f"[regression]\n{columns}")
    )
    assert (finding.rule, finding.column) == ("bad_value", "regression.columns")
    assert "'treatment_two_step'" in finding.got


def test_an_excluded_variable_among_the_controls(tmp_path: Path) -> None:
    finding = one_refusal(tmp_path, ('excluded = ["for_sale"]', 'excluded = ["leverage"]'))
    assert (finding.rule, finding.column) == ("excluded_is_control", "selection.excluded")
    assert "'leverage'" in finding.got


def test_parts_without_the_regression_they_serve(tmp_path: Path) -> None:
    start, end = BASE.index("[regression]"), BASE.index("[selection]")
    findings = refused(write(tmp_path / "study.toml", BASE[:start] + BASE[end:]))
    assert {(finding.rule, finding.column) for finding in findings} == {
        ("bad_value", "selection"),
        ("bad_value", "instruments"),
    }


def test_a_selection_model_without_candidates(tmp_path: Path) -> None:
    finding = one_refusal(tmp_path, ('candidates = "tables/candidates.csv"', ""))
    assert (finding.rule, finding.column) == ("bad_value", "inputs.candidates")


def test_a_factor_model_without_factors(tmp_path: Path) -> None:
    text = BASE + '\n[expected_returns]\nalso = ["factor_model"]\n'
    (finding,) = refused(write(tmp_path / "study.toml", text))
    assert (finding.rule, finding.column) == ("bad_value", "inputs.factors")
    named = text.replace("candidates =", 'factors = "f.csv"\ncandidates =', 1)
    study = load_study(write(tmp_path / "study.toml", named))
    assert study.expected_returns.all_models == ("market_model", "factor_model")


@pytest.mark.parametrize("zone", ["Europe/Londinium", "../zone", "GMT+25"])
def test_a_zone_that_no_clock_keeps(zone: str, tmp_path: Path) -> None:
    finding = one_refusal(tmp_path, ("Europe/London", zone))
    assert (finding.rule, finding.column) == ("bad_value", "inputs.timestamp_zone")
    assert zone in finding.got


@pytest.mark.parametrize(
    ("parts", "names"),
    [
        ('["big", "cash"]', ["big"]),
        ('["other", "cash"]', ["big", "other"]),
    ],
)
def test_interactions_in_a_circle(parts: str, names: list[str], tmp_path: Path) -> None:
    """A characteristic named like what it multiplies would be made of itself."""
    text = changed(('interaction = ["relative_size", "cash"]', f"interaction = {parts}"))
    text += '\n[characteristics.other]\ninteraction = ["big", "leverage"]\n'
    findings = refused(write(tmp_path / "study.toml", text))
    assert [finding.column for finding in findings if finding.rule == "bad_value"] == [
        f"characteristics.{name}.interaction" for name in names
    ]


def test_an_interaction_of_interactions_is_no_circle(tmp_path: Path) -> None:
    text = BASE + '\n[characteristics.other]\ninteraction = ["big", "big"]\n'
    study = load_study(write(tmp_path / "study.toml", text))
    assert study.characteristics["other"].interaction == ["big", "big"]
