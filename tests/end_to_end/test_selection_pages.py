"""From the study file to the page: the review of the selection model, gains and bounds."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from pipeline.core.estimate import Estimate
from pipeline.core.findings import InputProblem
from pipeline.core.results import Results
from pipeline.flow import run
from pipeline.report.content import report
from pipeline.report.document import Table, Text
from pipeline.report.figures import svg
from pipeline.study.load import load_study

CONFIGS = Path(__file__).resolve().parents[2] / "configs"
QUICK = """
base = "{base}"
name = "quick"

[placebo]
draws = 0

[scrutiny]
run = false

[expected_returns]
also = []

[report]
formats = ["tex"]
"""
ASKED = """
[regression]
expected_gain = true
columns = ["ols", "heckman_two_step", "heckman_likelihood"]

[bounds]
cells = ["target_listed"]
draws = 199
rationale = "Paying in shares is taken to move whether a return can be measured one way only."
"""
BARE = """
[regression]
columns = ["heckman_two_step"]

[selection]
excluded = []
draws = 0
"""


def ran(folder: Path, more: str) -> Results:
    path = folder / "quick.toml"
    path.write_text(QUICK.format(base=(CONFIGS / "demo.toml").as_posix()) + more, encoding="utf-8")
    return run(load_study(path))[0]


@pytest.fixture(scope="module")
def asked(tmp_path_factory: pytest.TempPathFactory) -> Results:
    return ran(tmp_path_factory.mktemp("asked"), ASKED)


@pytest.fixture(scope="module")
def bare(tmp_path_factory: pytest.TempPathFactory) -> Results:
    return ran(tmp_path_factory.mktemp("bare"), BARE)


def table(results: Results, name: str) -> Table:
    return next(found for found in report(results).tables if found.name == name)


def column(results: Results, key: str) -> Estimate:
    found = next(c for c in results.columns if c.estimator == key)
    assert isinstance(found, Estimate)
    return found


def test_versions_on_the_page_are_the_columns_of_the_run(asked: Results) -> None:
    frame = asked.tables["selection_versions"].set_index("version")
    two_step = column(asked, "heckman_two_step").term("paid_in_shares")
    assert frame.loc["Corrected formula", "estimate"] == two_step["coefficient"]
    assert frame.loc["Corrected formula", "std_error"] == two_step["std_error"]
    assert (frame["reason"] == "").all()
    drawn = frame.loc["Bootstrap of both steps", "std_error"]
    assert drawn == pytest.approx(frame.loc["Stacked moments, clustered", "std_error"], rel=0.1)
    page = table(asked, "selection_versions")
    assert len(page.rows) == len(frame)
    assert "Divisions for sale" in str(page.rows)


def test_checklist_is_answered(asked: Results) -> None:
    frame = asked.tables["selection_checks"]
    parts = {
        "First stage", "Excluded variables", "Collinearity of the correction",
        "Correlation of the errors", "Replications of both steps",
    }  # fmt: skip
    assert set(frame["part"]) == parts
    assert (frame["meaning"] != "").all()
    left = frame.loc[frame["check"].str.startswith("Left out"), "value"]
    assert left.between(0, 999).all()
    assert len(table(asked, "selection_checks").rows) == len(frame)


def test_first_stage_is_that_of_the_column(asked: Results) -> None:
    frame = asked.tables["selection_first_stage"].set_index("term")
    stage = column(asked, "heckman_two_step").stages[0]
    np.testing.assert_allclose(frame["coefficient"], stage.coefficients)
    assert frame.loc[frame["excluded"]].index.tolist() == ["divisions_for_sale"]
    effects = frame["marginal_effect"].drop("constant")
    assert (np.sign(effects) == np.sign(frame["coefficient"].drop("constant"))).all()


def test_profile_is_drawn_with_the_maximum_of_the_column(asked: Results) -> None:
    figure = next(f for f in report(asked).figures if f.name == "selection_likelihood")
    assert figure.marks["estimate"] == pytest.approx(
        column(asked, "heckman_likelihood").fit["rho"], abs=1e-6
    )
    assert "one peak" in figure.title.text
    assert svg(figure).startswith("<?xml")
    assert len(table(asked, "likelihood_starts").rows) >= 2


def test_gains_and_bounds_are_labelled_as_what_they_are(asked: Results) -> None:
    gains = asked.tables["expected_gain"]
    assert set(gains["model"]) == {"Foreseen gain", "Private news"}
    assert "not positive" in gains["reason"].iloc[0]
    bounds = asked.tables["bounds"]
    assert (bounds["lower"] <= bounds["upper"]).all()
    assert (bounds["seen"] <= bounds["deals"]).all()
    assert bounds["version"].iloc[-1] == "Within cells of Target is listed"
    text = " ".join(p.text for p in report(asked).paragraphs)
    assert "A sensitivity, not an estimate" in text
    assert "no differences in returns" in text
    assert "moves whether" not in text
    assert any("can be measured one way only" in p.text for p in report(asked).paragraphs)


def test_no_excluded_variable_warns_and_leads_nothing(bare: Results) -> None:
    assert [f.rule for f in bare.findings if f.rule == "no_exclusion"] == ["no_exclusion"]
    assert bare.lead == -1
    assert column(bare, "heckman_two_step").fit["curvature_alone"] == 1.0
    failed = bare.diagnostics[bare.diagnostics["verdict"] == "fail"]
    assert failed["check"].str.contains("announcing alone").any()
    checks = bare.tables["selection_checks"]
    assert "fail" in set(checks["verdict"])
    cells = [cell.text for row in table(bare, "selection_checks").rows for cell in row
             if isinstance(cell, Text)]  # fmt: skip
    assert "fail" in cells


@pytest.mark.parametrize(
    ("more", "rule"),
    [
        ("[selection]\nexcluded = ['leverage']\n", "excluded_is_control"),
        ("[selection]\nexplained_by = ['size', 'leverage', 'cash', 'run_up']\n",
         "selection_lacks_control"),
        ("[selection]\ndraws = 50\n", "bad_value"),
        ("[bounds]\nrationale = 'Long enough to be an argument.'\nobserved = 'nothing'\n", ""),
        ("[bounds]\nrationale = 'Long enough to be an argument.'\n"
         "[regression]\ncontinuous = true\n", "bad_value"),
    ],
)  # fmt: skip
def test_refusals_name_their_rule(tmp_path: Path, more: str, rule: str) -> None:
    with pytest.raises(InputProblem) as caught:
        ran(tmp_path, more)
    rules = {finding.rule for finding in caught.value.findings}
    assert rule in rules if rule else rules
