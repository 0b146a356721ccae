"""LIML, Fuller and GMM: where they meet two-stage least squares and where they must not."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import Estimate, EstimationFailed, NotApplicable, TestResult
from pipeline.core.findings import InputProblem
from pipeline.estimators.gmm import _efficient, two_step_gmm
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.k_class import fuller, limited_information, second_stage
from pipeline.estimators.least_squares import fixed_effects
from pipeline.estimators.stages import moment_covariance, parts_of
from tests.estimators.designs import deals, with_instruments, without

FITS = (limited_information, fuller, two_step_gmm)
Fit = Callable[[Design, FitOptions], Estimate]


@pytest.mark.parametrize("options", [FitOptions(), FitOptions(covariance="hc1")])
@pytest.mark.parametrize("fit", [limited_information, two_step_gmm])
def test_one_instrument_is_two_stages(fit: Fit, options: FitOptions) -> None:
    design = with_instruments(deals(), 0)
    one, two = fit(design, options), two_stage_least_squares(design, options)
    np.testing.assert_allclose(one.coefficients, two.coefficients, rtol=1e-9)
    np.testing.assert_allclose(one.covariance, two.covariance, rtol=1e-8, atol=1e-18)
    assert isinstance(one.tests["overidentification"], NotApplicable)


def test_zero_and_one_are_least_squares_and_two_stages() -> None:
    """κ = 0 and κ = 1 (Theil 1958)."""
    design = deals()
    parts = parts_of(design, FitOptions())
    least, two = fixed_effects(design, FitOptions()), two_stage_least_squares(design, FitOptions())
    for kappa, column in ((0.0, least), (1.0, two)):
        second = second_stage(parts, kappa)
        np.testing.assert_allclose(second.coefficients, column.coefficients, rtol=1e-9)
        np.testing.assert_allclose(second.covariance, column.covariance, rtol=1e-8, atol=1e-18)


@settings(max_examples=12, deadline=None)
@given(seed=st.integers(0, 10_000))
def test_fuller_lies_between_two_stages_and_limited_information(seed: int) -> None:
    """κ of Fuller is below that of LIML; both agree with the facts of the two-stage column."""
    design = without(deals(seed=seed, candidates=260), "selection")
    options = FitOptions(covariance="classical")
    liml, full = limited_information(design, options), fuller(design, options)
    two = two_stage_least_squares(design, options)
    assert 1 <= liml.fit["kappa"] == pytest.approx(two.fit["liml_kappa"], rel=1e-12)
    assert full.fit["kappa"] < liml.fit["kappa"]
    assert liml.term("paid_in_shares")["coefficient"] == pytest.approx(two.fit["liml"], rel=1e-8)
    assert full.term("paid_in_shares")["coefficient"] == pytest.approx(two.fit["fuller"], rel=1e-8)


# Identity: Sargan's statistic at LIML is n(1 - 1/κ).
def test_sargan_of_limited_information_is_its_root() -> None:
    column = limited_information(deals(), FitOptions(covariance="classical"))
    sargan = column.tests["overidentification"]
    assert isinstance(sargan, TestResult)
    assert sargan.statistic == pytest.approx(column.n * (1 - 1 / column.fit["kappa"]), rel=1e-8)


# Property: LIML treats outcome and treatment alike, so the reverse regression is its inverse.
def test_limited_information_does_not_care_which_side_is_explained() -> None:
    design = without(deals(), "effects", "selection")
    X = design.X.copy()
    X[:, 1] = design.y
    forth = limited_information(design, FitOptions()).term("paid_in_shares")["coefficient"]
    back = limited_information(replace(design, X=X, y=design.X[:, 1]), FitOptions())
    assert back.term("paid_in_shares")["coefficient"] == pytest.approx(1 / forth, rel=1e-7)
    two = two_stage_least_squares(replace(design, X=X, y=design.X[:, 1]), FitOptions())
    assert abs(two.term("paid_in_shares")["coefficient"] * forth - 1) > 1e-3


@pytest.mark.parametrize("fit", FITS)
def test_weak_instrument_checks_come_along(fit: Fit) -> None:
    design = deals()
    column, two = fit(design, FitOptions()), two_stage_least_squares(design, FitOptions())
    assert column.sets["anderson_rubin"] == two.sets["anderson_rubin"]
    assert column.tests["effective_f"] == two.tests["effective_f"]
    assert [stage.estimator for stage in column.stages] == ["first_stage", "reduced_form"]
    assert column.estimator == fit.__name__
    assert column.df == two.df


def test_classical_gmm_is_two_stages_and_says_so() -> None:
    options = FitOptions(covariance="classical")
    column, two = two_step_gmm(deals(), options), two_stage_least_squares(deals(), options)
    np.testing.assert_allclose(column.coefficients, two.coefficients, rtol=1e-10)
    assert any("those of two-stage" in note for note in column.notes)


@pytest.mark.parametrize("fit", FITS)
def test_too_many_instruments_for_the_clusters(fit: Fit) -> None:
    design = deals()
    few = replace(design, clusters={"half": np.arange(design.n) % 2})
    with pytest.raises(InputProblem) as caught:
        fit(few, FitOptions())
    assert caught.value.findings[0].rule == "too_many_instruments"


@pytest.mark.parametrize("fit", FITS)
def test_no_instrument(fit: Fit) -> None:
    design = replace(deals(), Z=np.empty((deals().n, 0)), instruments=())
    with pytest.raises(InputProblem) as caught:
        fit(design, FitOptions())
    assert caught.value.findings[0].rule == "under_identified"


def test_an_exact_fit_is_withheld() -> None:
    design = without(deals(), "effects")
    for fit in FITS:
        with pytest.raises(EstimationFailed, match="exactly"):
            fit(replace(design, y=design.X @ np.array([0.1, 0.2, 0.3, 0.4, 0.5])), FitOptions())


def test_weights_that_cannot_be_told_are_withheld() -> None:
    """The second instrument cancels within every cluster, so its moment has no variance."""
    rng = np.random.default_rng(4)
    z, sign = np.repeat(rng.normal(size=60), 2), np.tile([1.0, -1.0], 60)
    u = np.repeat(rng.normal(size=60), 2)
    D = z + sign
    design = Design(
        y=0.5 * D + u,
        X=np.column_stack([np.ones(120), D]),
        names=("constant", "treatment"),
        treatment="treatment",
        rows=tuple(map(str, range(120))),
        outcome="CAR",
        clusters={"pair": np.repeat(np.arange(60), 2)},
        Z=np.column_stack([z + 0.1 * rng.normal(size=120), sign]),
        instruments=("one", "other"),
    )
    parts = parts_of(design, FitOptions())
    S = moment_covariance(parts, parts.sample.y - parts.sample.X @ np.array([0.0, 0.5]))
    assert S[1, 1] < 1e-20
    with pytest.raises(EstimationFailed, match="too few clusters"):
        _efficient(parts, u)
