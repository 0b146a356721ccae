"""Study files: inheritance, paths, overrides, and keys nobody knows. Conventions of this
project's own file, so no outside source."""

from __future__ import annotations

from pathlib import Path

import pytest
from pydantic import ValidationError

from pipeline.core.window import Window
from pipeline.study.load import load_study
from tests.study.studies import BASE, changed, loaded, one_refusal, refused, write


def test_a_window_named_twice_is_measured_once(tmp_path: Path) -> None:
    twice = ("[[0, 1], [-5, 5]]", "[[0, 1], [-1, 1], [0, 1], [-0, 0], [0, -0]]")
    windows = loaded(tmp_path, twice).event_time.all_windows
    assert windows == (Window(-1, 1), Window(0, 1), Window(0, 0))


def test_a_file_becomes_a_study_with_its_defaults(tmp_path: Path) -> None:
    study = loaded(tmp_path)
    assert study.name == "study"
    assert study.event_time.headline_window == Window(-1, 1)
    assert study.event_time.all_windows == (Window(-1, 1), Window(0, 1), Window(-5, 5))
    assert study.event_time.cutoff_minutes == 0
    assert study.expected_returns.all_models == ("market_model",)
    assert study.level == 0.95
    assert study.tests.headline == "by_rule"
    assert study.inputs.deals == tmp_path / "tables" / "deals.xlsx"
    with pytest.raises(ValidationError):
        study.title = "Another"  # type: ignore[misc]


def test_three_lines_upon_a_base(tmp_path: Path) -> None:
    """A rerun with another window: everything else comes from the base, from the base's folder."""
    write(tmp_path / "base" / "demo.toml", BASE)
    three = 'base = "../base/demo.toml"\ntitle = "Wider"\nevent_time.headline = [-2, 2]\n'
    study = load_study(write(tmp_path / "mine" / "wider.toml", three))
    assert (study.name, study.title) == ("wider", "Wider")
    assert study.event_time.headline_window == Window(-2, 2)
    assert study.event_time.estimation_window == Window(-150, -31)
    assert study.inputs.deals == tmp_path / "base" / "tables" / "deals.xlsx"
    assert study.regression is not None
    assert study.regression.controls == ["relative_size", "leverage"]


def test_tables_merge_and_lists_are_replaced_whole(tmp_path: Path) -> None:
    write(tmp_path / "demo.toml", BASE)
    top = 'base = "demo.toml"\n[event_time]\nwindows = [[0, 2]]\n[regression]\ncontrols = []\n'
    study = load_study(write(tmp_path / "top.toml", top))
    assert study.event_time.all_windows == (Window(-1, 1), Window(0, 2))
    assert study.event_time.minimum_observations == 100
    assert study.regression is not None
    assert study.regression.controls == []
    assert study.regression.treatment == "shares"


def test_paths_count_from_the_file_that_names_them(tmp_path: Path) -> None:
    write(tmp_path / "one" / "demo.toml", BASE)
    top = 'base = "../one/demo.toml"\n[inputs]\nprices = "other.csv"\n'
    study = load_study(write(tmp_path / "two" / "top.toml", top))
    assert study.inputs.prices == tmp_path / "two" / "other.csv"
    assert study.inputs.benchmarks == tmp_path / "one" / "tables" / "benchmarks.csv"


def test_bases_in_a_row_and_a_name_of_their_own(tmp_path: Path) -> None:
    """A name belongs to its file: a base's name is not inherited."""
    write(tmp_path / "a.toml", 'name = "ours"\n' + BASE)
    write(tmp_path / "b.toml", 'base = "a.toml"\nseed = 5\n')
    study = load_study(write(tmp_path / "c.toml", 'base = "b.toml"\nlevel = 0.9\n'))
    assert (study.name, study.seed, study.level) == ("c", 5, 0.9)
    assert load_study(tmp_path / "a.toml").name == "ours"


def test_overrides_are_merged_last(tmp_path: Path) -> None:
    path = write(tmp_path / "study.toml", BASE)
    study = load_study(path, {"event_time": {"headline": [-3, 3]}})
    assert study.event_time.headline_window == Window(-3, 3)
    assert study.event_time.minimum_observations == 100


def test_files_that_inherit_from_one_another(tmp_path: Path) -> None:
    write(tmp_path / "a.toml", 'base = "b.toml"\n')
    write(tmp_path / "b.toml", 'base = "a.toml"\n')
    (finding,) = refused(tmp_path / "a.toml")
    assert (finding.rule, finding.file, finding.column) == ("bad_value", "a.toml", "base")
    assert "a.toml -> b.toml -> a.toml" in finding.got


@pytest.mark.parametrize("base", ["none.toml", "none"])
def test_a_base_that_is_not_there(base: str, tmp_path: Path) -> None:
    (finding,) = refused(write(tmp_path / "top.toml", f'base = "{base}"\n'))
    assert (finding.rule, finding.file, finding.column) == ("missing_file", "top.toml", "base")
    assert str(tmp_path / base) in finding.got


def test_a_base_that_is_no_name(tmp_path: Path) -> None:
    (finding,) = refused(write(tmp_path / "top.toml", "base = 3\n"))
    assert (finding.rule, finding.column, finding.got) == ("bad_value", "base", "3")


def test_a_study_file_that_is_not_there(tmp_path: Path) -> None:
    (finding,) = refused(tmp_path / "none.toml")
    assert (finding.rule, finding.file) == ("missing_file", "none.toml")


@pytest.mark.parametrize(
    "content", [b"title = [1, 2\n", b"title = \xff\n", b'title = "a"\ntitle = 1']
)
def test_a_file_that_is_no_toml(content: bytes, tmp_path: Path) -> None:
    path = tmp_path / "study.toml"
    path.write_bytes(content)
    (finding,) = refused(path)
    assert (finding.rule, finding.file) == ("unreadable_file", "study.toml")


def test_a_byte_order_mark_does_no_harm(tmp_path: Path) -> None:
    path = tmp_path / "study.toml"
    path.write_bytes(b"\xef\xbb\xbf" + BASE.encode())
    assert load_study(path).title == "Base"


@pytest.mark.parametrize(
    ("old", "new", "key", "near"),
    [
        ("question =", "questoin =", "questoin", "question"),
        ("[event_time]", "[event_times]", "event_times", "event_time"),
        ("minimum_observations", "minimum_obs", "event_time.minimum_obs", "minimum_observations"),
        ("controls =", "control =", "regression.control", "controls"),
        ("log = true", "logs = true", "characteristics.relative_size.logs", "log"),
        ("for =", "four =", "instruments.four", "for"),
    ],
)
def test_an_unknown_key_names_the_nearest(
    old: str, new: str, key: str, near: str, tmp_path: Path
) -> None:
    findings = refused(write(tmp_path / "study.toml", changed((old, new))))
    (unknown,) = [finding for finding in findings if finding.rule == "unknown_key"]
    assert (unknown.file, unknown.column) == ("study.toml", key)
    assert unknown.remedy == f"Did you mean '{near}'?"
    assert near in unknown.expected


def test_every_fault_of_a_file_at_once(tmp_path: Path) -> None:
    text = changed(
        ("headline = [-1, 1]", 'headline = "three days"'),
        ('title = "Base"', ""),
        ("controls =", "control ="),
    )
    findings = refused(write(tmp_path / "study.toml", text))
    assert {(finding.rule, finding.column) for finding in findings} >= {
        ("bad_value", "event_time.headline"),
        ("bad_value", "title"),
        ("unknown_key", "regression.control"),
    }


@pytest.mark.parametrize(
    ("old", "new", "column", "word"),
    [
        ("minimum_observations = 100", "minimum_observations = 10", "minimum_observations", "30"),
        ("headline = [-1, 1]", "headline = [1, -1]", "event_time", "last session"),
        ("headline = [-1, 1]", "headline = [-1, 1, 2]", "event_time.headline", "2 items"),
        ("headline = [-1, 1]", "headline = [-1.5, 1]", "event_time.headline.0", "integer"),
        ("log = true", 'log = "yes"', "characteristics.relative_size.log", "boolean"),
        ("log = true", "winsorise = 0.5", "characteristics.relative_size.winsorise", "0.5"),
        ('price = "run_up"', 'price = "momentum"', "characteristics.run_up.price", "one of run_up"),
        ("window = [-25, -11]", "window = [-11, -25]", "characteristics.run_up", "last session"),
        ("window = [-25, -11]", "lag = 1", "characteristics.run_up", "lag needs a column"),
        ("log = true", "window = [-25, -11]", "characteristics.relative_size", "price measure"),
        ("log = true", 'column = "size"', "characteristics.relative_size", "exactly one source"),
        (
            'clusters = ["security"]',
            'clusters = ["security", "industry", "year"]',
            "regression.clusters",
            "at most 2",
        ),
        ('rationale = "Spare', 'rationale = "Sp"\nlabel = "Spare', "instruments", "20 characters"),
    ],
)
def test_values_outside_what_a_key_allows(
    old: str, new: str, column: str, word: str, tmp_path: Path
) -> None:
    findings = refused(write(tmp_path / "study.toml", changed((old, new))))
    bad = [f for f in findings if f.rule == "bad_value" and column in f.column]
    assert len(bad) == 1
    assert word in bad[0].expected
    assert bad[0].file == "study.toml"


@pytest.mark.parametrize(
    ("section", "line", "known"),
    [
        ("expected_returns", 'headline = "market"', "market_model"),
        ("tests", 'use = ["sign_test"]', "cross_sectional"),
        ("report", 'formats = ["odt"]', "docx"),
    ],
)
def test_a_thing_the_registry_does_not_hold(
    section: str, line: str, known: str, tmp_path: Path
) -> None:
    (finding,) = refused(write(tmp_path / "study.toml", BASE + f"\n[{section}]\n{line}\n"))
    assert finding.rule == "bad_value"
    assert finding.column.startswith(section)
    assert known in finding.expected


@pytest.mark.parametrize("equals_and_above", ["", 'equals = "x"\nabove = 1.0'])
def test_an_indicator_has_one_condition(equals_and_above: str, tmp_path: Path) -> None:
    part = '[characteristics.hit]\nindicator.column = "a"\n'
    for line in equals_and_above.splitlines():
        part += f"indicator.{line}\n"
    (finding,) = refused(write(tmp_path / "study.toml", BASE + part))
    assert finding.column == "characteristics.hit.indicator"
    assert "either equals or above" in finding.expected


def test_a_long_value_is_cut_short(tmp_path: Path) -> None:
    finding = one_refusal(tmp_path, ("[-150, -31]", f'"{"x" * 300}"'))
    assert finding.column == "event_time.estimation"
    assert len(finding.got) <= 80


def test_a_window_that_ends_before_it_starts_says_so(tmp_path: Path) -> None:
    finding = one_refusal(tmp_path, ("headline = [-1, 1]", "headline = [5, -5]"))
    assert finding.column == "event_time"
    assert finding.got == "[5, -5] in 'headline'"
    assert "last session is its first or comes after it" in finding.expected
    assert "{" not in finding.got
