"""Weights, matches and learners: what each must do whatever the deals."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import EstimationFailed
from pipeline.core.findings import InputProblem
from pipeline.estimators.balance import effective_size, standardised_differences
from pipeline.estimators.bounds import bounds_of, imbens_manski, lee_bounds, trimmed_mean
from pipeline.estimators.checks import with_checks
from pipeline.estimators.doubly_robust import (
    doubly_robust,
    doubly_robust_treated,
    partially_linear,
)
from pipeline.estimators.errors import ErrorRule
from pipeline.estimators.learners import folds_of
from pipeline.estimators.least_squares import ols
from pipeline.estimators.matching import matching, matching_treated
from pipeline.estimators.propensity import fit_logit, observed
from pipeline.estimators.weighting import entropy_balancing, weighting, weighting_treated
from tests.estimators.designs import deals, shuffled, without

OVER_TREATED = (weighting_treated, entropy_balancing, doubly_robust_treated, matching_treated)
EVERY = (*OVER_TREATED, weighting, doubly_robust, matching)
LINES = FitOptions(learner="parametric", folds=1)


@pytest.fixture(scope="module")
def design() -> Design:
    return without(deals(), "effects", "clusters")


@pytest.mark.parametrize("fit", EVERY)
def test_one_effect_and_no_noise_is_found_exactly(fit, design: Design) -> None:  # type: ignore[no-untyped-def]
    """y linear in the controls plus 3 for the treated, plus a speck of noise for the variance."""
    noise = 1e-9 * np.random.default_rng(0).normal(size=design.n)
    y = design.X @ np.array([1.0, 3.0, 0.5, -0.2, 0.1]) + noise
    exact = replace(design, y=y)
    column = fit(exact, LINES)
    # Inverse weights leave the controls' means a little apart; the others leave nothing.
    loose = fit in (weighting, weighting_treated)
    assert column.term("paid_in_shares")["coefficient"] == pytest.approx(
        3, abs=0.2 if loose else 1e-6
    )


@pytest.mark.parametrize("fit", EVERY)
def test_refusals(fit, design: Design) -> None:  # type: ignore[no-untyped-def]
    X = design.X.copy()
    X[0, 1] = 2.0
    with pytest.raises(InputProblem) as caught:
        fit(replace(design, X=X), LINES)
    assert caught.value.findings[0].rule == "treatment_not_binary"


@pytest.mark.parametrize("fit", [*EVERY, partially_linear])
def test_separated_treatment_is_refused_by_name(fit, design: Design) -> None:  # type: ignore[no-untyped-def]
    X = design.X.copy()
    X[:, 3] = X[:, 1] * 2 + np.random.default_rng(1).random(design.n)
    with pytest.raises(InputProblem) as caught:
        fit(replace(design, X=X), FitOptions())
    assert (caught.value.findings[0].rule, caught.value.findings[0].column) == (
        "separation",
        "run_up",
    )


def test_entropy_balancing_without_a_counterpart(design: Design) -> None:
    """One treated deal lies among the others, the mean of the treated beyond all of them."""
    X = design.X.copy()
    X[:, 3] += 100 * X[:, 1]
    X[np.flatnonzero(X[:, 1])[0], 3] = X[X[:, 1] == 0, 3].mean()
    with pytest.raises(InputProblem) as caught:
        entropy_balancing(replace(design, X=X), FitOptions())
    finding = caught.value.findings[0]
    assert finding.rule == "no_overlap"
    assert "run_up" in finding.column


def test_balance_is_exact_after_entropy_balancing(design: Design) -> None:
    facts = entropy_balancing(design, FitOptions()).fit
    for name in ("relative_size", "run_up", "leverage"):
        assert abs(facts[f"after.{name}"]) < 1e-10
        assert abs(facts[f"before.{name}"]) > 1e-3


def test_entropy_balancing_influence_by_leaving_a_deal_out(design: Design) -> None:
    whole = entropy_balancing(design, FitOptions())
    assert whole.scores is not None
    pairs = []
    for at in range(0, design.n, 13):
        keep = np.arange(design.n) != at
        part = replace(
            design,
            y=design.y[keep],
            X=design.X[keep],
            Z=design.Z[keep],
            rows=tuple(np.array(design.rows)[keep]),
            selection=None,
        )
        change = whole.coefficients - entropy_balancing(part, FitOptions()).coefficients
        pairs.append([float(change[0]), float(whole.scores[at, 0])])
    left, influence = np.array(pairs).T
    assert np.corrcoef(left, influence)[0, 1] > 0.995


def test_weights_with_a_constant_probability_are_the_raw_difference(design: Design) -> None:
    bare = replace(design, X=design.X[:, :2], names=design.names[:2])
    plain = ols(bare, FitOptions(covariance="hc0")).term("paid_in_shares")
    for fit in (weighting, weighting_treated):
        term = fit(bare, FitOptions(covariance="hc0")).term("paid_in_shares")
        assert term["coefficient"] == pytest.approx(plain["coefficient"], rel=1e-10)
        assert term["std_error"] == pytest.approx(plain["std_error"], rel=1e-10)
    with pytest.raises(InputProblem) as caught:
        matching(bare, FitOptions())
    assert caught.value.findings[0].rule == "no_controls"


def test_partially_linear_on_its_own_rows_is_least_squares(design: Design) -> None:
    """Frisch and Waugh (1933), with HC0 the same error too."""
    plain = ols(design, FitOptions(covariance="hc0")).term("paid_in_shares")
    found = partially_linear(design, replace(LINES, covariance="hc0")).term("paid_in_shares")
    assert found["coefficient"] == pytest.approx(plain["coefficient"], rel=1e-9)
    assert found["std_error"] == pytest.approx(plain["std_error"], rel=1e-9)


def test_matching_variance_by_hand() -> None:
    """Six deals on a line, one match: Abadie and Imbens (2006), theorem 7, worked through.

    Treated at 0, 10, 20 with y = 5, 7, 6; others at 1, 11, 30 with y = 1, 2, 4. Matches of the
    treated: 1, 11, 11 (20 is 9 from 11 and 10 from 30). K of the others: 1, 2, 0.
    """
    x = np.array([0.0, 10, 20, 1, 11, 30])
    D = np.array([1.0, 1, 1, 0, 0, 0])
    y = np.array([5.0, 7, 6, 1, 2, 4])
    design = Design(
        y=y,
        X=np.column_stack([np.ones(6), D, x]),
        names=("constant", "treated", "size"),
        treatment="treated",
        rows=tuple("abcdef"),
        outcome="CAR",
    )
    column = matching_treated(design, FitOptions())
    assert column.fit["uncorrected"] == pytest.approx((4 + 5 + 4) / 3)
    # Least squares through (1, 1) once and (11, 2) twice is the line .9 + .1x; gaps in x are
    # -1, -1 and 9, so each difference loses .1 of the gap.
    corrected = np.array([4 + 0.1, 5 + 0.1, 4 - 0.9])
    effect = corrected.mean()
    assert column.coefficients[0] == pytest.approx(effect)
    # σ² of the deal used twice: its two nearest of the own arm are 1 and 30.
    sigma2 = 2 / 3 * (2 - (1 + 4) / 2) ** 2
    expected = (np.sum((corrected - effect) ** 2) + (2**2 - 2) * sigma2) / 9
    assert column.covariance[0, 0] == pytest.approx(expected)


def test_ties_share_a_match() -> None:
    x = np.array([0.0, 0, 1, 0, 0, 1, 1])
    D = np.array([1.0, 1, 1, 0, 0, 0, 0])
    y = np.array([1.0, 2, 3, 0, 4, 5, 8])
    design = Design(
        y=y,
        X=np.column_stack([np.ones(7), D, x]),
        names=("constant", "treated", "size"),
        treatment="treated",
        rows=tuple("abcdefg"),
        outcome="CAR",
    )
    column = matching_treated(design, FitOptions())
    assert column.coefficients[0] == pytest.approx(np.mean([1 - 2, 2 - 2, 3 - 6.5]))
    assert column.fit["ties"] == 1.0


@settings(max_examples=15, deadline=None, derandomize=True)
@given(st.integers(0, 2**32 - 1), st.integers(2, 6))
def test_folds_keep_clusters_whole_and_rows_in_place(seed: int, count: int) -> None:
    design = deals(seed=seed % 50, candidates=200)
    rule = ErrorRule("cluster", {"acquirer": design.clusters["acquirer"]}, design.n)
    options = FitOptions(folds=count, seed=seed)
    folds = folds_of(design, design.X[:, 1], rule, options)
    codes = design.clusters["acquirer"][folds.order]
    for code in np.unique(codes):
        assert len(set(folds.fold[codes == code])) == 1
    moved = shuffled(design, seed=seed % 99)
    again = folds_of(
        moved,
        moved.X[:, 1],
        ErrorRule("cluster", {"acquirer": moved.clusters["acquirer"]}, moved.n),
        options,
    )
    one = dict(zip(np.array(design.rows)[folds.order], folds.fold, strict=True))
    assert one == dict(zip(np.array(moved.rows)[again.order], again.fold, strict=True))


def test_too_few_clusters_for_the_folds(design: Design) -> None:
    two = replace(design, clusters={"half": np.arange(design.n) % 2})
    with pytest.raises(EstimationFailed, match="2 clusters by half for 5 folds"):
        doubly_robust(two, FitOptions())


def test_seed_moves_the_folds_and_nothing_else(design: Design) -> None:
    first, again = (doubly_robust(design, FitOptions(seed=1)) for _ in range(2))
    other = doubly_robust(design, FitOptions(seed=2))
    assert first.coefficients.tobytes() == again.coefficients.tobytes()
    assert first.coefficients[0] != other.coefficients[0]
    assert abs(first.coefficients[0] - other.coefficients[0]) < first.std_errors[0]


def test_forest_follows_a_curve_that_lines_miss() -> None:
    """A treatment chosen at both ends of a control that bends the outcome."""
    rng = np.random.default_rng(3)
    n = 500
    x = rng.normal(size=n)
    D = (rng.random(n) < 1 / (1 + np.exp(1 - x**2))).astype(float)
    design = Design(
        y=0.3 * D + 2 * x**2 + rng.normal(size=n),
        X=np.column_stack([np.ones(n), D, x]),
        names=("constant", "treated", "size"),
        treatment="treated",
        rows=tuple(map(str, range(n))),
        outcome="CAR",
    )
    missed = doubly_robust(design, FitOptions(learner="parametric")).term("treated")
    found = partially_linear(design, FitOptions(learner="forest", folds=2)).term("treated")
    assert missed["coefficient"] > 1
    assert abs(found["coefficient"] - 0.3) < 4 * found["std_error"]


def test_logit_is_the_maximum(design: Design) -> None:
    rows = observed(design, FitOptions())
    logit = fit_logit(rows.D, rows.X, rows.names)
    assert np.abs(rows.X.T @ (rows.D - logit.p)).max() < 1e-9


def test_effective_size_and_differences() -> None:
    assert effective_size(np.ones(7)) == pytest.approx(7)
    assert effective_size(np.array([1.0, 0, 0])) == pytest.approx(1)
    X = np.array([[1.0], [3], [0], [2]])
    D = np.array([True, True, False, False])
    # Means 2 and 1, both variances 2.
    assert standardised_differences(X, D, np.ones(4))[0] == pytest.approx(1 / np.sqrt(2))


def test_trimmed_mean_counts_part_of_a_row() -> None:
    y = np.array([4.0, 1, 3, 2])
    # A share of 3/8 of four rows is one row and a half.
    mean, cut = trimmed_mean(y, 3 / 8, from_below=True)
    assert (mean, cut) == (pytest.approx((0.5 * 2 + 3 + 4) / 2.5), 2.0)
    mean, _ = trimmed_mean(y, 3 / 8, from_below=False)
    assert mean == pytest.approx((0.5 * 3 + 2 + 1) / 2.5)


def test_imbens_manski_between_one_and_two_sides() -> None:
    low, high = imbens_manski(0.0, 100.0, 1.0, 1.0, 0.95)
    assert (low, high) == (pytest.approx(-1.6449, abs=1e-4), pytest.approx(101.6449, abs=1e-4))
    low, high = imbens_manski(0.0, 0.0, 1.0, 1.0, 0.95)
    assert (low, high) == (pytest.approx(-1.96, abs=1e-3), pytest.approx(1.96, abs=1e-3))


@settings(max_examples=20, deadline=None, derandomize=True)
@given(st.integers(0, 2**32 - 1))
def test_bounds_enclose_the_difference_and_mirror(seed: int) -> None:
    rng = np.random.default_rng(seed)
    n = 120
    D, seen = rng.random(n) < 0.5, rng.random(n) < 0.7
    y = rng.normal(size=n)
    found, other = bounds_of(y, D, seen), bounds_of(-y, D, seen)
    assert found.lower - 1e-12 <= found.difference <= found.upper + 1e-12
    assert (other.lower, other.upper) == (pytest.approx(-found.upper), pytest.approx(-found.lower))
    swapped = bounds_of(y, ~D, seen)
    assert (swapped.lower, swapped.upper) == (
        pytest.approx(-found.upper),
        pytest.approx(-found.lower),
    )
    np.testing.assert_allclose(found.influence.sum(axis=0), 0, atol=0.05)


def test_bounds_need_the_treatment_of_every_candidate() -> None:
    with pytest.raises(InputProblem) as caught:
        lee_bounds(deals(), FitOptions())
    assert caught.value.findings[0].rule == "treatment_not_known"


def test_two_controls_that_separate_together_are_refused(design: Design) -> None:
    """Neither does alone, so that a look at single variables would pass it."""
    X = design.X.copy()
    X[:, 3] = 2 * X[:, 1] - X[:, 2]
    X[:, 3] += np.random.default_rng(1).random(design.n)
    for fit in (matching, doubly_robust):
        with pytest.raises(InputProblem) as caught:
            fit(replace(design, X=X), FitOptions())
        (finding,) = caught.value.findings
        assert finding.rule == "separation"
        assert "run_up" in finding.column
        assert "relative_size" in finding.column


@pytest.mark.parametrize("fit", [matching, doubly_robust])
def test_deals_that_have_hardly_a_counterpart_fail_a_check(fit, design: Design) -> None:  # type: ignore[no-untyped-def]
    """All but three of either arm are told apart by one control; as it is, nothing fails."""
    X = design.X.copy()
    X[:, 3] += 8 * X[:, 1]
    for arm, there in ((0.0, 8.0), (1.0, 0.0)):
        X[np.flatnonzero(X[:, 1] == arm)[:3], 3] = there
    thin = with_checks(fit(replace(design, X=X), FitOptions()))
    failed = [check.check for check in thin.checks if check.verdict == "fail"]
    assert any("run_up" in name for name in failed)
    assert not any(c.verdict == "fail" for c in with_checks(fit(design, FitOptions())).checks)


def test_share_of_extreme_probabilities_fails_above_a_fifth(design: Design) -> None:
    column = doubly_robust(design, FitOptions())
    for fact in ("propensity_extreme", "clipped"):
        verdicts = [
            {c.check: c.verdict for c in with_checks(replace(column, fit={fact: share})).checks}
            for share in (0.05, 0.06, 0.21)
        ]
        assert [next(iter(found.values())) for found in verdicts] == ["pass", "warn", "fail"]
