"""Keys about the doubts: what they ask for, and what is refused before a table is read."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from pipeline.scrutiny.anticipation import Expected
from pipeline.study import plan
from pipeline.study.plan_scrutiny import scrutiny_options
from tests.study.studies import BASE, loaded, one_refusal, refused, write

END = 'rationale = "Spare shares were left over before the deal was conceived."\n'


def asked(text: str) -> tuple[str, str]:
    """The base with tables written at its end."""
    return END, END + "\n" + text


def test_every_value_reaches_the_scrutiny(tmp_path: Path) -> None:
    study = loaded(
        tmp_path,
        asked(
            """
[scrutiny]
benchmarks = ["leverage"]
multiples = [1.0, 5.0]
largest_r2 = [0.9]
resamples = 60
correlations = [0.5]
reliability = { leverage = 0.8 }
simulate_errors = true
misclassified = [[0.1, 0.0]]
misplaced = [0.3]
known_before = [0.0, 0.5]
completion = [0.7]
known_unequally = [[0.3, 0.1]]
violations = [0.2]
reverse = ["relative_size"]
reverse_rationale = "Size tells the market what is at stake and the payer nothing."
"""
        ),
    )
    codes = {"country": np.zeros(3, dtype=np.int64)}
    found = scrutiny_options(study, {"industry": ("a",)}, codes)
    assert found.benchmarks == ("leverage",)
    assert found.multiples == (1.0, 5.0)
    assert found.largest_r2 == (0.9,)
    assert found.resamples == 60
    assert found.correlations == (0.5,)
    assert found.reliability == {"leverage": 0.8}
    assert found.simex
    assert found.misclassified == ((0.1, 0.0),)
    assert found.misplaced == (0.3,)
    assert (found.known_before, found.completion) == ((0.0, 0.5), (0.7,))
    assert found.expected == (Expected(0.3, 0.1),)
    assert found.violations == (0.2,)
    assert found.reverse == ("relative_size",)
    assert found.outcome == "return"
    assert found.words("day_zero") == "announcement day"
    assert found.dimensions == codes
    assert (
        plan.facts(study, "dependence_adjusted", ())
        .rationales["What moves the return and not the choice"]
        .startswith("Size tells")
    )


def test_columns_of_samples_and_groups_are_read(tmp_path: Path) -> None:
    study = loaded(
        tmp_path,
        asked(
            """
[scrutiny]
leave_out = ["country"]

[scrutiny.grid]
run = true

[scrutiny.grid.samples]
"the North" = { column = "region", equals = "north" }
"large deals" = { column = "deal_value", above = 100 }
"small relative to the buyer" = { column = "relative_size", below = 0 }
"""
        ),
    )
    wanted = plan.wanted(study)
    assert {"country", "region"} <= set(wanted.deal_texts)
    assert "deal_value" in wanted.deal_numbers
    assert "relative_size" not in (*wanted.deal_numbers, *wanted.deal_texts)


@pytest.mark.parametrize(
    ("text", "rule", "key"),
    [
        ('[scrutiny]\nbenchmarks = ["rumour"]', "benchmark_not_control", "scrutiny.benchmarks"),
        ('[scrutiny]\nbenchmarks = ["shares"]', "benchmark_not_control", "scrutiny.benchmarks"),
        (
            "[scrutiny]\nreliability = { rumour = 0.9 }",
            "reliability_variable",
            "scrutiny.reliability",
        ),
        (
            "[scrutiny]\nreliability = { leverage = 0.0 }",
            "reliability_range",
            "scrutiny.reliability.leverage",
        ),
        (
            "[scrutiny]\nreliability = { leverage = 1.01 }",
            "reliability_range",
            "scrutiny.reliability.leverage",
        ),
        (
            '[scrutiny.grid]\ncontrol_sets = [["leverage", "rumour"]]',
            "grid_control",
            "scrutiny.grid.control_sets",
        ),
        ("[scrutiny.grid]\nwinsorise = [0.3]", "winsorise_range", "scrutiny.grid.winsorise"),
        (
            '[scrutiny.grid]\nestimators = ["heckman_two_step"]',
            "bad_value",
            "scrutiny.grid.estimators",
        ),
        (
            '[scrutiny]\nreverse = ["spare"]\n'
            'reverse_rationale = "It tells the market something and the payer nothing."',
            "reverse_instrument",
            "scrutiny.reverse",
        ),
        (
            '[scrutiny]\nreverse = ["leverage"]\nreverse_rationale = "So."',
            "bad_value",
            "scrutiny",
        ),
        ("[scrutiny]\nmultiples = [0.0]", "bad_value", "scrutiny.multiples.0"),
        ("[scrutiny]\ncompletion = [0.0]", "bad_value", "scrutiny.completion.0"),
        ("[scrutiny]\nknown_before = [1.0]", "bad_value", "scrutiny.known_before.0"),
        ("[scrutiny]\ncorrelations = [1.0]", "bad_value", "scrutiny.correlations.0"),
        ("[scrutiny]\nlargest_r2 = [1.2]", "bad_value", "scrutiny.largest_r2.0"),
        ("[scrutiny]\nmisclassified = [[0.1]]", "bad_value", "scrutiny.misclassified.0"),
    ],
)
def test_a_doubt_without_an_answer_names_its_key(
    text: str, rule: str, key: str, tmp_path: Path
) -> None:
    finding = one_refusal(tmp_path, asked(text))
    assert (finding.rule, finding.column) == (rule, key)
    assert finding.remedy
    assert finding.expected


def test_a_reverse_equation_needs_instruments(tmp_path: Path) -> None:
    text = BASE[: BASE.index("[instruments]")] + (
        '[scrutiny]\nreverse = ["leverage"]\n'
        'reverse_rationale = "It tells the market something and the payer nothing."\n'
    )
    (finding,) = refused(write(tmp_path / "study.toml", text))
    assert (finding.rule, finding.column) == ("reverse_instrument", "scrutiny.reverse")


@pytest.mark.parametrize(
    "condition", ["{ column = 'x' }", "{ column = 'x', equals = 1, above = 0 }"]
)
def test_a_sample_has_one_condition(condition: str, tmp_path: Path) -> None:
    finding = one_refusal(tmp_path, asked(f"[scrutiny.grid.samples]\nodd = {condition}"))
    assert finding.rule == "bad_value"
    assert finding.column.startswith("scrutiny.grid.samples")
