"""The wild cluster bootstrap against refits of every draw, and what its interval means."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from itertools import product

import numpy as np
import pytest
from scipy import linalg

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import Shape
from pipeline.core.findings import InputProblem
from pipeline.estimators import wild
from pipeline.estimators.errors import CLUSTER, ErrorRule
from pipeline.estimators.few_clusters import basis_of
from pipeline.estimators.least_squares import ols
from pipeline.estimators.sample import Sample, plain, within
from tests.estimators.designs import shuffled
from tests.estimators.test_few_clusters import dense, small, wide

ACQUIRER = "acquirer"


def sample_of(design: Design, absorbed: bool = False) -> Sample:
    if absorbed:
        return within(design, FitOptions(cluster=True))
    return plain(design, ErrorRule(CLUSTER, dict(design.clusters), design.n))


def boot(design: Design, *, absorbed: bool = False, **more: object) -> wild.Bootstrapped:
    sample = sample_of(design, absorbed)
    return wild.bootstrap(sample, design, sample.rule.clusters[ACQUIRER], **more)  # type: ignore[arg-type]


def t_of(X: np.ndarray, y: np.ndarray, codes: np.ndarray, at: int, null: float) -> float:
    """t of coefficient ``at`` with CR0 errors, the factor of CR1 being the same in every draw."""
    bread = np.linalg.pinv(X.T @ X)
    b = bread @ X.T @ y
    scores = X * (y - X @ b)[:, None]
    sums = np.array([scores[codes == g].sum(axis=0) for g in np.unique(codes)])
    error = np.sqrt((bread @ sums.T @ sums @ bread)[at, at])
    return float((b[at] - null) / error)


def refits(
    X: np.ndarray, y: np.ndarray, codes: np.ndarray, at: int, null: float, weights: np.ndarray
) -> Iterator[float]:
    """t of each draw, every one refitted on the rows."""
    others = np.delete(X, at, axis=1)
    fitted = others @ linalg.lstsq(others, y - null * X[:, at])[0] + null * X[:, at]
    for v in weights:
        yield t_of(X, fitted + (y - fitted) * v[codes], codes, at, null)


def every_sign(groups: int) -> np.ndarray:
    return np.array(list(product([1.0, -1.0], repeat=groups)))


def brute_p(
    X: np.ndarray, design: Design, at: int, null: float, weights: np.ndarray, observed: float
) -> float:
    codes = design.clusters[ACQUIRER]
    drawn = np.abs(list(refits(X, design.y, codes, at, null, weights)))
    return float(np.mean(drawn >= abs(observed) * (1 - 1e-9)))


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_enumeration_is_every_sign_vector_refitted(seed: int) -> None:
    design = small(seed, groups=6)
    codes = design.clusters[ACQUIRER]
    found = boot(design)
    t = t_of(design.X, design.y, codes, 1, 0.0)
    column = ols(design, FitOptions(cluster=True))
    assert (found.enumerated, found.draws) == (True, 64)
    assert found.statistic == pytest.approx(column.term("treatment")["statistic"], rel=1e-10)
    assert found.std_error == pytest.approx(column.term("treatment")["std_error"], rel=1e-10)
    assert found.p_value == brute_p(design.X, design, 1, 0.0, every_sign(6), t)
    assert found.p_value >= 2 / 64, "the data and their mirror image are among the draws"


@pytest.mark.parametrize("effects", [("acquirer",), ("year",), ("acquirer", "year")])
def test_effects_stay_in_every_refit(effects: tuple[str, ...]) -> None:
    design = dense(4, *effects)
    X = wide(design)
    found = boot(design, absorbed=True)
    t = t_of(X, design.y, design.clusters[ACQUIRER], 0, 0.0)
    assert found.p_value == brute_p(X, design, 0, 0.0, every_sign(6), t)


def test_each_drawn_t_is_the_refitted_t() -> None:
    design = small(8, groups=7)
    sample, codes = sample_of(design), design.clusters[ACQUIRER]
    scores = wild.scores_of(sample, basis_of(sample, design, codes), 1)
    weights = np.random.default_rng(3).choice(wild.SIX_POINTS, size=(40, 7))
    null = 0.17
    delta = scores.estimate - null
    drawn = wild.draw(scores, [weights[:25], weights[25:]], False)
    top = drawn.top + delta * drawn.top_slope
    variance = drawn.constant + delta * (drawn.linear + delta * drawn.square)
    wanted = np.array(list(refits(design.X, design.y, codes, 1, null, weights)))
    np.testing.assert_allclose(top / np.sqrt(variance), wanted, rtol=1e-9)


@pytest.mark.parametrize("seed", [1, 4])
def test_ends_of_the_interval_are_where_refits_begin_to_reject(seed: int) -> None:
    design = small(seed, groups=7)
    found = boot(design)
    codes, signs = design.clusters[ACQUIRER], every_sign(7)
    assert found.set.shape is Shape.INTERVAL
    for end, outward in ((found.set.low, -1), (found.set.high, 1)):
        for step, rejects in ((-1e-4, False), (1e-4, True)):
            null = end + outward * step * found.std_error
            t = t_of(design.X, design.y, codes, 1, null)
            p = brute_p(design.X, design, 1, null, signs, t)
            assert (p <= 0.05) is rejects
    assert found.set.covers(0.0) is (found.p_value > 0.05)


def test_four_clusters_bound_nothing() -> None:
    """Two of sixteen sign vectors give back |t| itself, so no p falls below an eighth."""
    found = boot(small(2, groups=4))
    assert found.set.shape is Shape.LINE
    assert found.p_value >= 1 / 8
    # Webb's six points give 6^4 draws, so an end can be found again.
    assert boot(small(2, groups=4), kind=wild.WEBB, level=0.5).set.shape is Shape.INTERVAL


def test_random_draws_come_close_to_all_of_them() -> None:
    design = small(3, groups=12, n=120)
    every, some = boot(design), boot(design, draws=4000)
    assert (every.enumerated, some.enumerated) == (True, False)
    error = np.sqrt(every.p_value * (1 - every.p_value) / 4000)
    assert abs(some.p_value - every.p_value) < 4 * error
    width = every.set.high - every.set.low
    assert abs(some.set.low - every.set.low) < 0.05 * width
    assert boot(design, draws=4000) == some, "same data, same seed, same answer"


@pytest.mark.parametrize("more", [{}, {"draws": 500}, {"draws": 500, "kind": wild.WEBB}])
def test_the_p_value_alone_is_the_same(more: dict[str, object]) -> None:
    for seed in range(5):
        design = small(seed, groups=9)
        sample, codes = sample_of(design), design.clusters[ACQUIRER]
        alone = wild.p_value(sample, design, codes, **more)  # type: ignore[arg-type]
        assert alone == boot(design, **more).p_value


def test_rows_and_units_do_not_matter() -> None:
    design = small(5)
    first = boot(design)
    X = design.X.copy()
    X[:, 2] *= 1e6
    for other in (shuffled(design), replace(design, X=X), replace(design, y=design.y + 3)):
        again = boot(other)
        assert again.p_value == first.p_value
        assert (again.set.low, again.set.high) == pytest.approx(
            (first.set.low, first.set.high), rel=1e-7
        )
    hundred = boot(replace(design, y=100 * design.y))
    assert hundred.set.low == pytest.approx(100 * first.set.low, rel=1e-7)


def test_few_columns_a_draw_do_what_one_a_cluster_does() -> None:
    """Random signs take a shorter way; each draw's numerator and variance must be the same."""
    design = small(6, groups=25, n=200)
    sample, codes = sample_of(design), design.clusters[ACQUIRER]
    scores = wild.scores_of(sample, basis_of(sample, design, codes), 1)
    made, enumerated = wild.weight_blocks(25, 500, wild.SIGNS)
    blocks = list(made)
    assert not enumerated
    short, long = wild.draw_signs(scores, blocks), wild.draw(scores, blocks, False)
    for name in ("top", "top_slope", "constant", "linear", "square"):
        one, other = getattr(short, name), getattr(long, name)
        np.testing.assert_allclose(one, other, rtol=1e-9, atol=1e-12 * np.abs(other).max())
    assert wild.p_value(sample, design, codes, draws=500) == boot(design, draws=500).p_value


def test_clusters_that_say_nothing_are_refused() -> None:
    """Each cluster has one deal of either kind and its own constant: residual sums are zero."""
    group = np.repeat(np.arange(2), 2)
    design = Design(
        y=np.array([0.0, 1.0, 0.3, 1.7]),
        X=np.column_stack([np.ones(4), group]).astype(float),
        names=("constant", "treatment"),
        treatment="treatment",
        rows=tuple("abcd"),
        outcome="CAR",
        clusters={ACQUIRER: group},
    )
    with pytest.raises(InputProblem) as caught:
        boot(design)
    assert caught.value.findings[0].rule == "cluster_decides"


# Source: Webb's points have mean 0, variance 1 and third moment 0 (MacKinnon, Nielsen and Webb
# 2023, from memory).
def test_six_points() -> None:
    moments = [float(np.mean(wild.SIX_POINTS**power)) for power in (1, 2, 3)]
    assert moments == pytest.approx([0.0, 1.0, 0.0], abs=1e-15)
    blocks, enumerated = wild.weight_blocks(5, 9000, wild.WEBB)
    values, counts = np.unique(np.concatenate(list(blocks)), return_counts=True)
    np.testing.assert_array_equal(values, np.sort(wild.SIX_POINTS))
    assert not enumerated
    assert (abs(counts - 7500) < 4 * np.sqrt(45000 * 5 / 36)).all()


def test_signs_are_fair() -> None:
    blocks, _ = wild.weight_blocks(20, 9999, wild.SIGNS)
    signs = np.concatenate(list(blocks))
    assert signs.shape == (9999, 20)
    assert set(np.unique(signs)) == {-1.0, 1.0}
    assert abs(signs.mean()) < 4 / np.sqrt(signs.size)
