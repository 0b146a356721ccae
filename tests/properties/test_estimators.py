"""Properties that hold for any deals, not only the ones thought of."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import NotApplicable, Shape
from pipeline.estimators import absorb
from pipeline.estimators import covariance as cov
from pipeline.estimators.anderson_rubin import anderson_rubin_test
from pipeline.estimators.clustered_forms import inverted_forms
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.least_squares import fixed_effects, ols
from pipeline.estimators.stages import parts_of
from tests.estimators.designs import deals, with_instruments

SEEDS = st.integers(0, 2**32 - 1)
QUICK = settings(max_examples=25, deadline=None, derandomize=True)


def small(seed: int, n: int = 60, L: int = 2) -> Design:
    """Random deals with uneven effects and clusters."""
    rng = np.random.default_rng(seed)
    Z = rng.normal(size=(n, L))
    u = rng.normal(size=n)
    D = Z @ rng.uniform(0.0, 1.0, size=L) + u + rng.normal(size=n)
    X = np.column_stack([np.ones(n), D, rng.normal(size=(n, 2))])
    y = 0.3 * D - u + X[:, 2] + rng.normal(size=n)
    weights = np.sort(rng.dirichlet(np.ones(8)))
    return Design(
        y=y,
        X=X,
        names=("constant", "treatment", "a", "b"),
        treatment="treatment",
        rows=tuple(map(str, range(n))),
        outcome="CAR",
        Z=Z,
        instruments=tuple(f"z{at}" for at in range(L)),
        effects={"industry": rng.choice(8, size=n, p=weights), "year": rng.integers(0, 4, size=n)},
        clusters={"acquirer": rng.integers(0, 15, size=n), "month": rng.integers(0, 11, size=n)},
    )


@QUICK
@given(SEEDS, st.floats(-5, 5), st.floats(-5, 5))
def test_adding_regressors_to_the_outcome_moves_their_coefficients(
    seed: int, on_treatment: float, on_control: float
) -> None:
    design = small(seed)
    moved = replace(
        design, y=design.y + on_treatment * design.X[:, 1] + on_control * design.X[:, 2]
    )
    for fit in (ols, fixed_effects, two_stage_least_squares):
        one, other = fit(design, FitOptions()), fit(moved, FitOptions())
        for name, shift in (("treatment", on_treatment), ("a", on_control), ("b", 0.0)):
            before, after = one.term(name), other.term(name)
            assert after["coefficient"] == pytest.approx(before["coefficient"] + shift, abs=1e-7)
            assert after["std_error"] == pytest.approx(before["std_error"], rel=1e-6)
        for key, found in one.sets.items():
            assert other.sets[key].shape is found.shape
            np.testing.assert_allclose(
                [other.sets[key].low, other.sets[key].high],
                [found.low + on_treatment, found.high + on_treatment],
                rtol=1e-5,
                atol=1e-6,
            )


@QUICK
@given(SEEDS, st.sampled_from([1, 2, 3]), st.sampled_from(["hc1", "classical", "auto"]))
def test_the_set_holds_what_the_test_accepts(seed: int, L: int, kind: str) -> None:
    design, options = small(seed, L=L), FitOptions(covariance=kind)
    found = two_stage_least_squares(design, options).sets["anderson_rubin"]
    forms = inverted_forms(parts_of(design, options))
    for value in np.tan(np.linspace(-1.57, 1.57, 80)):
        test = anderson_rubin_test(forms, float(value))
        accepted = isinstance(test, NotApplicable) or test.p_value >= 0.05
        if accepted:
            assert found.covers(float(value))
        elif "pieces" not in found.method:
            assert not found.covers(float(value))


@QUICK
@given(SEEDS)
def test_values_that_differ_between_groups_only_do_not_matter_within(seed: int) -> None:
    design = small(seed)
    rng = np.random.default_rng(seed)
    industry = rng.normal(size=8)[design.effects["industry"]]
    year = rng.normal(size=4)[design.effects["year"]]
    X = design.X.copy()
    X[:, 2] += 3 * year
    one = fixed_effects(design, FitOptions())
    other = fixed_effects(replace(design, X=X, y=design.y + industry - year), FitOptions())
    np.testing.assert_allclose(other.coefficients, one.coefficients, rtol=1e-6, atol=1e-8)
    np.testing.assert_allclose(other.covariance, one.covariance, rtol=1e-5, atol=1e-10)


@QUICK
@given(SEEDS)
def test_names_of_groups_and_clusters_do_not_matter(seed: int) -> None:
    design = small(seed)
    relabel = np.random.default_rng(seed).permutation(10_000)
    other = replace(
        design,
        effects={k: relabel[c] for k, c in design.effects.items()},
        clusters={k: relabel[c] for k, c in design.clusters.items()},
    )
    for fit in (fixed_effects, two_stage_least_squares):
        one, two = fit(design, FitOptions()), fit(other, FitOptions())
        np.testing.assert_allclose(one.coefficients, two.coefficients, rtol=1e-8)
        np.testing.assert_allclose(one.covariance, two.covariance, rtol=1e-7, atol=1e-14)
        assert one.clusters == two.clusters


@QUICK
@given(SEEDS)
def test_a_combination_of_the_instruments_is_the_same_instruments(seed: int) -> None:
    design = small(seed)
    mix = np.array([[1.0, 2.0], [-0.5, 3.0]])
    one = two_stage_least_squares(design, FitOptions())
    other = two_stage_least_squares(replace(design, Z=design.Z @ mix), FitOptions())
    np.testing.assert_allclose(other.coefficients, one.coefficients, rtol=1e-7, atol=1e-9)
    np.testing.assert_allclose(other.covariance, one.covariance, rtol=1e-6)
    mine, theirs = one.sets["anderson_rubin"], other.sets["anderson_rubin"]
    assert mine.shape is theirs.shape
    if mine.shape in (Shape.INTERVAL, Shape.RAYS):
        assert (theirs.low, theirs.high) == pytest.approx((mine.low, mine.high), rel=1e-5)
    for key in ("effective_f", "robust_f", "overidentification"):
        assert getattr(other.tests[key], "statistic", 0) == pytest.approx(
            getattr(one.tests[key], "statistic", 0), rel=1e-5
        )


@QUICK
@given(SEEDS, st.integers(1, 3))
def test_demeaned_columns_have_no_mean_in_any_group(seed: int, how_many: int) -> None:
    rng = np.random.default_rng(seed)
    n = int(rng.integers(20, 80))
    effects = {str(at): rng.integers(0, rng.integers(2, 12), size=n) for at in range(how_many)}
    Y = rng.normal(size=(n, 2))
    left = absorb.demean(Y, effects)
    for codes in effects.values():
        sums = cov.cluster_sums(left, codes)
        np.testing.assert_allclose(sums, 0, atol=1e-7)
    np.testing.assert_allclose(absorb.demean(left, effects), left, atol=1e-7)


@QUICK
@given(SEEDS)
def test_singletons_never_move_a_coefficient(seed: int) -> None:
    design = small(seed)
    rng = np.random.default_rng(seed)
    lone = rng.choice(design.n, size=4, replace=False)
    codes = design.effects["industry"].copy()
    codes[lone] = 50 + np.arange(4)
    y = design.y.copy()
    odd = replace(design, effects={"industry": codes}, clusters={})
    y[lone] += 1e3 * rng.normal(size=4)
    assume(absorb.without_singletons(odd.effects).sum() > 30)
    one = fixed_effects(odd, FitOptions())
    other = fixed_effects(replace(odd, y=y), FitOptions())
    np.testing.assert_allclose(other.coefficients, one.coefficients, rtol=1e-9, atol=1e-11)
    assert one.n <= design.n - 4


@pytest.mark.parametrize("seed", range(5))
def test_limited_information_is_two_stages_with_one_instrument(seed: int) -> None:
    # Two copies of one instrument's information: κ is 1 and the estimators coincide.
    design = with_instruments(deals(seed=seed), 0)
    column = two_stage_least_squares(design, FitOptions())
    again = two_stage_least_squares(replace(design, Z=design.Z * -7.0), FitOptions())
    np.testing.assert_allclose(again.coefficients, column.coefficients, rtol=1e-9)
    assert again.sets["anderson_rubin"].low == pytest.approx(column.sets["anderson_rubin"].low)
