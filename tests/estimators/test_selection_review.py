"""The review of a selection model: each answer against another way to reach it."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import statsmodels.api as sm

from pipeline.core.design import Design, FitOptions, SelectionRows
from pipeline.core.estimate import EstimationFailed
from pipeline.core.selection import (
    FirstStageTerm,
    SelectionCheck,
    SelectionReview,
    SelectionVersion,
    frame_of,
)
from pipeline.estimators import likelihood_maximum
from pipeline.estimators.checks import with_checks
from pipeline.estimators.errors import ErrorRule
from pipeline.estimators.marginal import average_effects
from pipeline.estimators.probit import Equation, fit_probit
from pipeline.estimators.selection import heckman_two_step
from pipeline.estimators.selection_checks import correlation_words
from pipeline.estimators.selection_controls import controlled, powers, straight_line
from pipeline.estimators.selection_ml import heckman_likelihood, joint_model
from pipeline.estimators.selection_review import review_selection
from tests.estimators.designs import deals


@pytest.fixture(scope="module")
def design() -> Design:
    return deals()


@pytest.fixture(scope="module")
def review(design: Design) -> SelectionReview:
    return review_selection(design, FitOptions(), 999)


def rows_of(design: Design) -> SelectionRows:
    assert design.selection is not None
    return design.selection


def version(review: SelectionReview, words: str) -> SelectionVersion:
    return next(row for row in review.versions if row.version == words)


def check(review: SelectionReview, words: str) -> SelectionCheck:
    return next(row for row in review.checks if words in row.check)


def bare(design: Design) -> Design:
    """Announcing explained by a regressor of the outcome alone."""
    rows = rows_of(design)
    keep = [rows.names.index(name) for name in ("constant", "leverage")]
    fewer = replace(rows, W=rows.W[:, keep], names=("constant", "leverage"), excluded=())
    return replace(design, selection=fewer)


def test_marginal_effects_against_statsmodels(design: Design) -> None:
    """statsmodels: average marginal effects, a change from 0 to 1 for dummies, delta method."""
    rows = rows_of(design)
    fit = sm.Probit(rows.selected.astype(float), rows.W).fit(disp=0, tol=1e-12)
    outside = fit.get_margeff(at="overall", dummy=True)
    found = average_effects(rows.W, rows.names, fit.params, fit.cov_params())
    assert [effect.name for effect in found] == list(rows.names[1:])
    np.testing.assert_allclose([e.effect for e in found], outside.margeff, rtol=1e-8)
    np.testing.assert_allclose([e.std_error for e in found], outside.margeff_se, rtol=1e-6)
    assert [e.step for e in found] == ["one more unit"] * 3 + ["from 0 to 1"]


def test_first_stage_is_the_probit(design: Design, review: SelectionReview) -> None:
    stage = heckman_two_step(design, FitOptions(cluster=True)).stages[0]
    frame = frame_of(review.first_stage, FirstStageTerm)
    np.testing.assert_allclose(frame["coefficient"], stage.coefficients)
    np.testing.assert_allclose(frame["std_error"], stage.std_errors)
    assert frame.loc[frame["excluded"], "term"].tolist() == ["divisions_for_sale", "listed_for"]
    assert check(review, "Pseudo").value == pytest.approx(stage.fit["pseudo_r_squared"])
    assert check(review, "Area").value == pytest.approx(stage.fit["auc"])
    assert check(review, "Candidates that announced").value == design.n


def test_versions_are_the_columns_they_name(design: Design, review: SelectionReview) -> None:
    pairs = {
        "Corrected formula": heckman_two_step(design, FitOptions(covariance="classical")),
        "Stacked moments, HC1": heckman_two_step(design, FitOptions(covariance="hc1")),
        "Stacked moments, clustered": heckman_two_step(design, FitOptions(cluster=True)),
        "Both equations at once": heckman_likelihood(design, FitOptions(cluster=True)),
    }
    for words, column in pairs.items():
        row, term = version(review, words), column.term("paid_in_shares")
        assert (row.estimate, row.std_error) == (term["coefficient"], term["std_error"])
        assert row.correction_p == column.tests["no_selection"].p_value  # type: ignore[union-attr]
    drawn, two_step = (
        version(review, "Bootstrap of both steps"),
        version(review, "Corrected formula"),
    )
    assert drawn.estimate == pytest.approx(two_step.estimate, rel=1e-8)
    kinds = {row.kind for row in review.versions}
    assert kinds == {
        "No correction", "Errors of the two steps", "Likelihood", "One excluded variable left out",
        "Shape of the correction",
    }  # fmt: skip


def test_each_exclusion_is_left_out_in_turn(design: Design, review: SelectionReview) -> None:
    rows = rows_of(design)
    left = rows.names.index("listed_for")
    fewer = replace(
        rows,
        W=np.delete(rows.W, left, axis=1),
        names=rows.names[:left],
        excluded=("divisions_for_sale",),
    )
    column = heckman_two_step(replace(design, selection=fewer), FitOptions(cluster=True))
    row = version(review, "Without listed_for")
    assert row.estimate == pytest.approx(column.term("paid_in_shares")["coefficient"], rel=1e-9)
    assert version(review, "Without divisions_for_sale").reason == ""


def test_straight_line_by_a_plain_reading(design: Design, review: SelectionReview) -> None:
    rows = rows_of(design)
    a = np.linalg.lstsq(rows.W, rows.selected.astype(float))[0]
    wide = np.column_stack(
        [design.X[rows.outcome_row[rows.selected]], rows.W[rows.selected] @ a - 1]
    )
    b = np.linalg.lstsq(wide, design.y[rows.outcome_row[rows.selected]])[0]
    assert version(review, "Straight line in the probability").estimate == pytest.approx(b[1])


def test_powers_do_not_depend_on_where_the_index_is_measured(design: Design) -> None:
    """The span of 1, a, a², a³ is that of their standardised form: the effect is the same."""
    rows = rows_of(design)
    first = fit_probit(Equation(rows.selected, rows.W, rows.names, "a", rows.names[-1]))
    rule = ErrorRule("hc0", {}, len(rows.selected))
    names, b, V = controlled(design, rows, powers(rows, first, 3), rule)
    a = first.index[rows.selected]
    wide = np.column_stack([design.X[rows.outcome_row[rows.selected]], a, a**2, a**3])
    plain = np.linalg.lstsq(wide, design.y[rows.outcome_row[rows.selected]])[0]
    at = names.index("paid_in_shares")
    assert b[at] == pytest.approx(plain[at], rel=1e-8)
    assert V[at, at] > 0


@pytest.mark.parametrize("shape", ["line", "powers"])
def test_influence_predicts_leaving_a_candidate_out(design: Design, shape: str) -> None:
    rows = rows_of(design)

    def fit(keep: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        place = np.full(design.n, -1)
        kept = rows.outcome_row[keep]
        place[kept[kept >= 0]] = np.arange((kept >= 0).sum())
        order = np.argsort(place)[(place < 0).sum() :]
        some = replace(
            rows, W=rows.W[keep], selected=rows.selected[keep],
            outcome_row=np.where(kept >= 0, place[kept], -1), clusters={},
        )  # fmt: skip
        part = replace(
            design, y=design.y[order], X=design.X[order], Z=design.Z[order], effects={},
            clusters={}, rows=tuple(design.rows[at] for at in order), selection=some,
        )  # fmt: skip
        if shape == "line":
            control = straight_line(some)
        else:
            equation = Equation(some.selected, some.W, some.names, "a", some.names[-1])
            control = powers(some, fit_probit(equation), 2)
        _, b, V = controlled(part, some, control, ErrorRule("hc0", {}, len(keep)))
        return b, V

    every = np.arange(len(rows.selected))
    b, V = fit(every)
    # The jackknife's variance over all candidates against the sandwich, to first order in 1/A.
    left = np.array([fit(np.delete(every, at))[0][1] for at in every[::4]])
    jackknife = 4 * np.sum((left - b[1]) ** 2)
    assert jackknife == pytest.approx(V[1, 1], rel=0.25)


def test_no_excluded_variable_is_shown_marked_and_does_not_lead(design: Design) -> None:
    lone = bare(design)
    column = with_checks(heckman_two_step(lone, FitOptions(covariance="hc1")))
    assert column.fit["curvature_alone"] == 1.0
    assert "curvature" in column.estimand
    assert any(check.verdict == "fail" for check in column.checks)
    found = review_selection(lone, FitOptions(), 0)
    asked = next(row for row in found.checks if row.part == "Excluded variables")
    assert (asked.verdict, asked.value) == ("fail", 0.0)
    assert not any(row.kind == "One excluded variable left out" for row in found.versions)


def test_curvature_may_lead_where_the_study_allows_it() -> None:
    design = deals()
    rows = rows_of(design)
    undeclared = replace(design, selection=replace(rows, excluded=()))
    options = FitOptions(allow_functional_form=True)
    column = with_checks(heckman_two_step(undeclared, options))
    assert "curvature_alone" not in column.fit
    assert not any(check.verdict == "fail" for check in column.checks)


def test_a_version_without_a_number_says_why(design: Design) -> None:
    """Every deal the same size but one: the straight line is a combination of the regressors."""
    lone = bare(design)
    found = review_selection(lone, FitOptions(), 0)
    row = version(found, "Straight line in the probability")
    assert np.isnan(row.estimate)
    assert "linearly dependent" in row.reason


def test_profile_and_starts(design: Design, review: SelectionReview) -> None:
    column = heckman_likelihood(design, FitOptions())
    profile = {p.rho: p.log_likelihood for p in review.likelihood if p.kind == "profile"}
    starts = [p for p in review.likelihood if p.kind == "start"]
    assert len(profile) == 43
    best = max(profile, key=lambda rho: profile[rho])
    assert abs(best - column.fit["rho"]) <= 0.05
    assert any(p.agrees and p.rho == pytest.approx(column.fit["rho"], abs=1e-6) for p in starts)
    for key, value in column.fit.items():
        if key.startswith("profile.") and float(key[8:]) in profile:
            assert profile[float(key[8:])] == pytest.approx(value, abs=1e-6)


def test_an_edge_is_surveyed_though_no_maximum_is_shown() -> None:
    rng = np.random.default_rng(2)
    n = 300
    w, v = rng.normal(size=(2, n))
    chosen = w + v > 0
    model = likelihood_maximum.Joint(
        np.where(chosen, 1.0, -1.0),
        np.column_stack([np.ones(n), w]),
        np.flatnonzero(chosen),
        v[chosen] + 1e-3 * rng.normal(size=chosen.sum()),
        np.ones((int(chosen.sum()), 1)),
    )
    start = (np.zeros(1), 1.0, 0.9)
    with pytest.raises(EstimationFailed, match="keeps rising"):
        likelihood_maximum.maximise(model, np.array([0.0, 1.0]), start)
    found = likelihood_maximum.survey(model, np.array([0.0, 1.0]), start)
    assert max(found.profile, key=lambda rho: found.profile[rho]) == 0.99
    assert not any(start.agrees for start in found.starts if abs(start.ended) >= 0.998)


def test_survey_is_of_the_columns_own_model(design: Design) -> None:
    model, gamma, start = joint_model(design, rows_of(design))
    assert model.X.shape == (design.n, len(design.names))
    assert len(gamma) == len(rows_of(design).names)
    assert abs(start[2]) < 1


@pytest.mark.parametrize(
    ("rho", "p", "inflation", "said"),
    [
        (0.2, 0.01, 1.0, "weak"),
        (-0.8, 0.01, 1.0, "lower returns"),
        (0.5, 0.4, 1.0, "no proof that there is no selection"),
        (0.5, 0.4, 20.0, "nearly a combination"),
        (1.3, 0.01, 1.0, "Outside its range"),
    ],
)
def test_correlation_in_words(rho: float, p: float, inflation: float, said: str) -> None:
    assert said in correlation_words(rho, p, inflation)
