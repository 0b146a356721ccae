"""Matched pairs, correlated errors, anticipation and declared signs."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import t_reach
from pipeline.core.findings import InputProblem
from pipeline.core.rules import RULES
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.least_squares import fixed_effects, ols
from pipeline.estimators.selection import heckman_two_step
from pipeline.scrutiny import correlation, pairs
from pipeline.scrutiny.anticipation import Expected, unanticipated
from pipeline.scrutiny.directions import Suspect, direction_of
from pipeline.scrutiny.ground import ground_of
from pipeline.scrutiny.on_expectations import kept_rows
from tests.estimators.designs import deals, without
from tests.scrutiny import worlds

PLAIN = FitOptions()


@pytest.fixture(scope="module")
def design() -> Design:
    return without(deals(), "selection")


def refused(caught: pytest.ExceptionInfo[InputProblem]) -> str:
    rule = caught.value.findings[0].rule
    assert rule in RULES
    return rule


def test_pairs_are_of_both_kinds_and_used_once(design: Design) -> None:
    found = pairs.matched_pairs(design)
    D = design.X[:, 1]
    assert (D[found.treated] == 1).all()
    assert (D[found.untreated] == 0).all()
    assert len(set(found.treated)) == len(found.treated) == min(D.sum(), (1 - D).sum())
    assert len(set(found.untreated)) == len(found.untreated)


def test_pairs_are_nearer_than_pairs_at_random(design: Design) -> None:
    found = pairs.matched_pairs(design)
    rng = np.random.default_rng(1)
    gap = np.abs(design.X[found.treated, 2:] - design.X[found.untreated, 2:]).mean()
    other = rng.permutation(found.untreated)
    assert gap < 0.8 * np.abs(design.X[found.treated, 2:] - design.X[other, 2:]).mean()


def test_pairs_without_controls_still_pair(design: Design) -> None:
    bare = replace(design, X=design.X[:, :2], names=design.names[:2])
    assert len(pairs.matched_pairs(bare).distance) > 5


@given(seed=st.integers(0, 999), first=st.floats(1, 8), more=st.floats(0.05, 8))
@settings(max_examples=40, deadline=None)
def test_more_hidden_bias_widens_the_bounds(seed: int, first: float, more: float) -> None:
    gaps = np.random.default_rng(seed).normal(0.2, 1, size=30).round(1)
    narrow = pairs.signed_rank_bounds(gaps, first)
    wide = pairs.signed_rank_bounds(gaps, first + more)
    assert wide[0] <= narrow[0] <= narrow[1] <= wide[1]


def test_gamma_is_where_significance_ends() -> None:
    gaps = np.random.default_rng(2).normal(0.7, 1, size=80)
    gamma = pairs.breakdown_gamma(gaps)
    assert gamma > 1.2
    assert 2 * pairs.signed_rank_bounds(gaps, gamma)[1] == pytest.approx(0.05, rel=1e-6)
    assert pairs.breakdown_gamma(-gaps) == pytest.approx(gamma, rel=1e-9)
    assert pairs.breakdown_gamma(np.array([1.0, -1.0, 0.5, -0.5, 0.1])) == 1.0


def test_bounds_need_something_to_rank() -> None:
    for gaps, gamma in ((np.zeros(4), 1.0), (np.ones(4), 0.5)):
        with pytest.raises(ValueError, match="gamma"):
            pairs.signed_rank_bounds(gaps, gamma)


def test_pairs_of_a_measured_feature_are_refused() -> None:
    measured = worlds.noisy_treatment(np.random.default_rng(0), 50)
    for ask in (pairs.matched_pairs, correlation.treatment_choice):
        with pytest.raises(InputProblem) as caught:
            ask(measured)
        assert refused(caught) == "treatment_not_binary"


def test_no_correlation_is_least_squares(design: Design) -> None:
    ground = ground_of(design, PLAIN)
    value, low, high = correlation.effect_at(
        ground, correlation.treatment_choice(design), 0.0, 0.95
    )
    assert value == pytest.approx(ground.estimate, rel=1e-10)
    assert (high - low) / 2 == pytest.approx(
        ground.robust * t_reach(0.95, ground.robust_df), rel=1e-9
    )


def test_the_two_step_rho_gives_back_the_two_step_effect() -> None:
    """Given the ρ a two-step fit found, the profile's effect is that fit's, exactly."""
    design = worlds.hidden_announcers(np.random.default_rng(3), 900, 0.5)
    column = heckman_two_step(design, PLAIN)
    ground = ground_of(design, PLAIN)
    choice = correlation.announcement_choice(design)
    value = correlation.effect_at(ground, choice, column.fit["rho"], 0.95)[0]
    assert value == pytest.approx(column.term("D")["coefficient"], abs=1e-9)


@pytest.mark.parametrize("rho", [-0.6, 0.4])
def test_the_true_correlation_gives_the_true_effect(rho: float) -> None:
    design = worlds.hidden_choice(np.random.default_rng(5), 20_000, rho)
    ground = ground_of(design, PLAIN)
    choice = correlation.treatment_choice(design)
    _, low, high = correlation.effect_at(ground, choice, rho, 0.999)
    assert low < worlds.EFFECT < high
    assert (
        not ground.estimate - 5 * ground.robust
        < worlds.EFFECT
        < (ground.estimate + 5 * ground.robust)
    )


def test_the_breakdown_correlation_is_an_edge() -> None:
    design = worlds.hidden_choice(np.random.default_rng(6), 500, 0.0)
    ground = ground_of(design, PLAIN)
    choice = correlation.treatment_choice(design)
    rho = correlation.breakdown_rho(ground, choice, 0.95)
    _, low, high = correlation.effect_at(ground, choice, rho, 0.95)
    assert min(abs(low), abs(high)) < 1e-6
    assert 0 < rho < 1
    flipped = ground_of(replace(design, y=-design.y), PLAIN)
    assert correlation.breakdown_rho(flipped, choice, 0.95) == pytest.approx(-rho, abs=1e-6)


def test_no_breakdown_without_an_effect(design: Design) -> None:
    noise = replace(design, y=np.random.default_rng(1).normal(size=design.n))
    choice = correlation.treatment_choice(noise)
    assert correlation.breakdown_rho(ground_of(noise, PLAIN), choice, 0.9999) == 0.0


def test_correlation_of_one_is_refused(design: Design) -> None:
    choice = correlation.treatment_choice(design)
    with pytest.raises(ValueError, match="rho"):
        correlation.effect_at(ground_of(design, PLAIN), choice, 1.0, 0.95)
    with pytest.raises(InputProblem) as caught:
        correlation.announcement_choice(design)
    assert refused(caught) == "no_selection"


@pytest.mark.parametrize("cluster", [False, True])
def test_nothing_anticipated_changes_nothing(design: Design, cluster: bool) -> None:
    options = FitOptions(cluster=cluster, covariance="auto" if cluster else "hc1")
    for fit in (ols, fixed_effects, two_stage_least_squares):
        column = fit(design, options)
        kept = kept_rows(column, design)
        assert kept is not None
        found = unanticipated(column, design, kept, Expected(0.0, 0.0), 0.95)
        term = column.term(design.treatment)
        assert found == pytest.approx(
            (term["coefficient"], term["ci_low"], term["ci_high"]), rel=1e-9
        )


def test_equal_anticipation_scales_the_effect(design: Design) -> None:
    column = ols(design, PLAIN)
    kept = np.ones(design.n, dtype=bool)
    value, low, high = unanticipated(column, design, kept, Expected(0.25, 0.25, 0.8), 0.95)
    term = column.term(design.treatment)
    assert value == pytest.approx(term["coefficient"] / 0.6, rel=1e-10)
    assert (low, high) == pytest.approx((term["ci_low"] / 0.6, term["ci_high"] / 0.6), rel=1e-9)


def test_unequal_anticipation_against_rescaled_group_means() -> None:
    """Without controls: each group's mean over what of its news was new, errors by hand."""
    rng = np.random.default_rng(4)
    D = (np.arange(60) < 25).astype(float)
    y = 0.02 - 0.03 * D + 0.05 * rng.normal(size=60)
    design = replace(worlds.made(y, D, np.zeros(60)), X=np.column_stack([np.ones(60), D]),
                     names=("constant", "D"))  # fmt: skip
    column = ols(design, FitOptions(covariance="hc0"))
    found = unanticipated(column, design, np.ones(60, dtype=bool), Expected(0.4, 0.1), 0.95)
    one, none = y[D == 1], y[D == 0]
    assert found[0] == pytest.approx(one.mean() / 0.6 - none.mean() / 0.9, rel=1e-10)
    variance = one.var() / 25 / 0.36 + none.var() / 35 / 0.81
    # The mean's own error, which hangs on how many deals are treated, adds what it must.
    half = (found[2] - found[1]) / 2 / t_reach(0.95, column.df)
    share = 25 / 60
    on_share = (one.mean() - none.mean()) * (1 / 0.6 - 1 / 0.9)
    assert half**2 == pytest.approx(variance + on_share**2 * share * (1 - share) / 60, rel=1e-9)


@pytest.mark.parametrize(
    "chances", [Expected(1.0, 0.0), Expected(-0.1, 0.0), Expected(0.0, 0.0, 0.0)]
)
def test_certain_news_is_refused(design: Design, chances: Expected) -> None:
    with pytest.raises(InputProblem) as caught:
        unanticipated(ols(design, PLAIN), design, np.ones(design.n, dtype=bool), chances, 0.95)
    assert refused(caught) == "probability_range"


@pytest.mark.parametrize(
    ("signs", "estimate", "bias", "words"),
    [
        ("-+", -0.02, "-", "above the estimate: smaller, or of the other sign"),
        ("--", -0.02, "+", "below the estimate: larger in size"),
        ("++", 0.02, "+", "below the estimate: smaller, or of the other sign"),
        ("+-", 0.02, "-", "above the estimate: larger in size"),
        ("?+", 0.02, "?", "not known"),
        ("?0", 0.02, "0", "as estimated"),
    ],
)
def test_signs_of_the_bias(signs: str, estimate: float, bias: str, words: str) -> None:
    found = direction_of(Suspect("overvaluation", signs[0], signs[1]), estimate)
    assert (found.bias, found.true_effect) == (bias, words)


def test_declared_signs_agree_with_a_confounder_that_exists() -> None:
    design, hidden = worlds.confounded(np.random.default_rng(1), 5000)
    short = ground_of(design, PLAIN).estimate
    full = np.linalg.lstsq(np.column_stack([design.X, hidden]), design.y)[0]
    found = direction_of(Suspect("hidden", "-", "+"), short)
    assert found.bias == "-"
    assert short < full[1]


def test_a_sign_that_is_none() -> None:
    with pytest.raises(InputProblem) as caught:
        direction_of(Suspect("overvaluation", "plus", "+"), 0.1)
    assert refused(caught) == "suspect_sign"
