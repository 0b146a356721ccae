"""The demo was made with an effect of -80 bp: which columns find it, and which are fooled."""

from __future__ import annotations

import json

import pandas as pd
import pytest

from tests.end_to_end.conftest import ROOT, dealwake

TRUTH = json.loads((ROOT / "data_demo" / "truth.json").read_text())
STUDY = """
base = "{base}"
[placebo]
draws = 0
[scrutiny]
run = false
[report]
formats = ["tex"]
[regression]
columns = [
  "ols", "fixed_effects", "weighting", "doubly_robust",
  "two_stage_least_squares", "limited_information", "fuller", "two_step_gmm",
  "selection_two_stage", "treatment_two_step", "treatment_likelihood",
]
"""
FOOLED = ("ols", "fixed_effects", "weighting", "doubly_robust")
FINDING_IT = (
    "two_stage_least_squares",
    "limited_information",
    "fuller",
    "two_step_gmm",
    "selection_two_stage",
    "treatment_two_step",
    "treatment_likelihood",
)


@pytest.fixture(scope="module")
def effects(tmp_path_factory: pytest.TempPathFactory) -> pd.DataFrame:
    folder = tmp_path_factory.mktemp("columns")
    study = folder / "columns.toml"
    study.write_text(STUDY.format(base=(ROOT / "configs" / "demo.toml").as_posix()))
    dealwake("run", study, "--out", folder / "run")
    numbers = pd.read_parquet(folder / "run" / "data" / "headline.parquet")
    own = numbers[numbers["name"].str.startswith("effect_")]
    return own.set_axis(own["name"].str.replace(r"^effect_\d+_", "", regex=True))


def truth() -> float:
    return float(TRUTH["parameters"]["effect_shares"])


@pytest.mark.parametrize("column", FOOLED)
def test_columns_that_only_hold_records_fixed_are_far_from_it(
    effects: pd.DataFrame, column: str
) -> None:
    assert effects.loc[column, "ci_high"] < truth()
    assert effects.loc[column, "value"] < 2 * truth()


@pytest.mark.parametrize("column", FINDING_IT)
def test_columns_with_instruments_or_a_model_of_the_choice_are_on_it(
    effects: pd.DataFrame, column: str
) -> None:
    row = effects.loc[column]
    assert row["ci_low"] < truth() < row["ci_high"]
    assert abs(row["value"] - truth()) < 0.004
