"""The bootstrap of an instrumented coefficient against a loop that refits every draw."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import linalg

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import NotApplicable, Shape, TestResult
from pipeline.estimators import wild, wild_instruments
from pipeline.estimators.gmm import two_step_gmm
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.k_class import fuller, limited_information
from pipeline.estimators.stages import parts_of
from pipeline.estimators.wild_instruments import Weights
from tests.estimators.several import two_chosen
from tests.estimators.test_least_squares import dummies

ASKED = FitOptions(draws=199)


def one_chosen(**more: int) -> Design:
    return replace(two_chosen(n=200, groups=9, **more), also_endogenous=())


def two_of(**more: int) -> Design:
    return two_chosen(n=200, groups=9, **more)


class Rows:
    """The procedure as it is written, on the rows, every regressor a column."""

    def __init__(self, design: Design, weights: Weights):
        wide = dummies(design)
        places = [wide.names.index(n) for n in (design.treatment, *design.also_endogenous)]
        self.y, self.E, self.Z = wide.y, wide.X[:, places], wide.Z
        C = np.delete(wide.X, places, axis=1)
        self.C = linalg.orth(C / np.linalg.norm(C, axis=0))
        self.codes = design.clusters["acquirer"]
        self.weights = weights

    @staticmethod
    def off(columns: np.ndarray, on: np.ndarray) -> np.ndarray:
        return np.asarray(columns - on @ np.linalg.lstsq(on, columns)[0])

    def fit(self, y: np.ndarray, E: np.ndarray) -> tuple[float, float]:
        """Treatment's coefficient and the root of its summed squared cluster scores."""
        X, every = np.column_stack([E, self.C]), np.column_stack([self.Z, self.C])
        kappa = 1.0
        if self.weights.root and E.shape[1] < self.Z.shape[1]:
            Y = np.column_stack([y, E])
            inner, outer = self.off(Y, every), self.off(Y, self.C)
            kappa = float(linalg.eigh(outer.T @ outer, inner.T @ inner, eigvals_only=True)[0])
        weighed = X - (kappa - self.weights.less) * self.off(X, every)
        bread = np.linalg.pinv(weighed.T @ X)
        b = bread @ (weighed.T @ y)
        rows = (weighed @ bread[0]) * (y - X @ b)
        sums = np.bincount(self.codes, weights=rows)
        return float(b[0]), float(np.sqrt(sums @ sums))

    def t(self, null: float, v: np.ndarray) -> float:
        """t* of one draw of weights v (G,)."""
        every = np.column_stack([self.Z, self.C])
        y0 = self.y - null * self.E[:, 0]
        X = np.column_stack([self.E[:, 1:], self.C])
        gamma = np.linalg.lstsq(X - self.off(X, every), y0)[0]
        u = y0 - X @ gamma
        wide = np.column_stack([every, u])
        pi = np.linalg.lstsq(wide, self.E)[0]
        systematic = every @ pi[:-1]
        V = self.E - systematic
        w = v[self.codes][:, None]
        E = systematic + w * V
        # The restricted equation holds in the drawn world with its own endogenous variables.
        y = null * E[:, 0] + np.column_stack([E[:, 1:], self.C]) @ gamma + w[:, 0] * u
        b, error = self.fit(y, E)
        return (b - null) / error


@pytest.mark.parametrize("weights", [Weights(), Weights(root=True), Weights(root=True, less=0.01)])
@pytest.mark.parametrize("make", [one_chosen, two_of])
@pytest.mark.parametrize("effects", [(), ("industry",), ("acquirer", "year")])
def test_every_draw_is_the_refit(make: object, weights: Weights, effects: tuple[str, ...]) -> None:
    assert callable(make)
    design = make()
    known = {**design.effects, **design.clusters}
    design = replace(design, effects={name: known[name] for name in effects})
    moments = wild_instruments.moments_of(parts_of(design, FitOptions()))
    rows = Rows(design, weights)
    rng = np.random.default_rng(1)
    signs = rng.choice([-1.0, 1.0], size=(12, 9))
    points = rng.choice(wild.SIX_POINTS, size=(4, 9))
    for null in (0.0, -0.05):
        world = wild_instruments.world_of(moments, null)
        for v in (signs, points):
            gap, error = wild_instruments.ratios(moments, weights, world, v)
            ours = gap / error * moments.factor
            theirs = [rows.t(null, draw) for draw in v]
            np.testing.assert_allclose(ours, theirs, rtol=1e-9, atol=1e-9)


@pytest.mark.parametrize("fit", [two_stage_least_squares, limited_information, fuller])
@pytest.mark.parametrize("make", [one_chosen, two_of])
def test_the_statistic_is_the_column_s_own_t(fit: object, make: object) -> None:
    assert callable(fit)
    assert callable(make)
    column = fit(make(), ASKED)
    test = column.tests["wild_bootstrap"]
    assert isinstance(test, TestResult)
    assert test.statistic == pytest.approx(column.term("paid_in_shares")["statistic"], rel=1e-8)
    kept = column.sets["wild_bootstrap"]
    assert kept.covers(column.term("paid_in_shares")["coefficient"])
    assert kept.covers(0.0) == (test.p_value > 0.05)


def test_the_ends_of_the_set_are_where_the_test_turns() -> None:
    parts = parts_of(one_chosen(), FitOptions())
    moments = wild_instruments.moments_of(parts)
    draws = list(wild.weight_blocks(moments.groups, 199, wild.WEBB, 3)[0])
    found = wild_instruments.inverted(moments, Weights(), draws, 0.95)
    assert found.shape is Shape.INTERVAL
    _, error = wild_instruments.estimated(moments, Weights())
    for end, inward in ((found.low, 1.0), (found.high, -1.0)):
        values = [
            wild_instruments.p_value(
                moments, Weights(), end + s * 1e-3 * error, draws, enumerated=False
            )
            for s in (inward, -inward)
        ]
        assert values[0] > 0.05 >= values[1]


def test_all_sign_vectors_count_the_data_among_them() -> None:
    design = replace(one_chosen(), effects={})
    moments = wild_instruments.moments_of(parts_of(design, FitOptions()))
    bits = (np.arange(512)[:, None] >> np.arange(9)) & 1
    p = wild_instruments.p_value(moments, Weights(), 0.5, [1.0 - 2.0 * bits], enumerated=True)
    assert p >= 1 / 512
    assert p * 512 == pytest.approx(round(p * 512))


def test_order_and_units_do_not_matter() -> None:
    design = one_chosen()
    order = np.random.default_rng(0).permutation(design.n)
    moved = replace(
        design,
        y=100 * design.y[order],
        X=design.X[order],
        Z=3 * design.Z[order],
        effects={k: c[order] for k, c in design.effects.items()},
        clusters={k: c[order] for k, c in design.clusters.items()},
    )
    one, other = two_stage_least_squares(design, ASKED), two_stage_least_squares(moved, ASKED)
    assert one.tests["wild_bootstrap"].p_value == other.tests["wild_bootstrap"].p_value  # type: ignore[union-attr]
    assert other.sets["wild_bootstrap"].low == pytest.approx(
        100 * one.sets["wild_bootstrap"].low, rel=1e-6
    )


def test_where_there_is_none() -> None:
    design = one_chosen()
    assert "wild_bootstrap" not in two_stage_least_squares(design, FitOptions()).tests
    assert "wild_bootstrap" not in two_step_gmm(design, ASKED).tests
    robust = two_stage_least_squares(design, FitOptions(covariance="hc1", draws=99))
    assert "wild_bootstrap" not in robust.tests
    two_way = replace(design, clusters={**design.clusters, "year": design.effects["year"]})
    assert isinstance(
        two_stage_least_squares(two_way, ASKED).tests["wild_bootstrap"], NotApplicable
    )
    own = replace(design, clusters={"deal": np.arange(design.n) % 199})
    assert isinstance(two_stage_least_squares(own, ASKED).tests["wild_bootstrap"], TestResult)
    one_each = two_stage_least_squares(
        replace(two_chosen(n=420), clusters={"deal": np.arange(420)}, also_endogenous=()), ASKED
    )
    assert isinstance(one_each.tests["wild_bootstrap"], NotApplicable)
