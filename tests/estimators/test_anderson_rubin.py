"""Anderson-Rubin sets against brute force over the whole line."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from pipeline.core.estimate import ConfidenceSet, Shape
from pipeline.estimators import anderson_rubin as ar

# Dense on the projective line: tan of equally spaced angles, so no value is out of reach.
ANGLES = (np.arange(20_000) + 0.5) / 20_000 * np.pi - np.pi / 2


def random_forms(seed: int, L: int, strength: float) -> ar.ReducedForms:
    rng = np.random.default_rng(seed)
    root = rng.normal(size=(2 * L, 2 * L + 2))
    return ar.ReducedForms(
        strength * rng.normal(size=L), strength * rng.normal(size=L), root @ root.T / 10, 40.0
    )


def accepted(forms: ar.ReducedForms) -> np.ndarray:
    """Which angles the F test accepts at 5%, by its definition, all at once."""
    L = len(forms.outcome)
    c, s = np.cos(ANGLES)[:, None], np.sin(ANGLES)[:, None]
    pi = c * forms.outcome - s * forms.treatment
    V = forms.covariance
    pick = np.stack([np.hstack([a * np.eye(L), -b * np.eye(L)]) for a, b in ((1, 0), (0, 1))])
    move = c[:, :, None] * pick[0] + s[:, :, None] * pick[1]
    spread = move @ V @ move.transpose(0, 2, 1)
    wald = np.einsum("ij,ij->i", pi, np.linalg.solve(spread, pi[:, :, None])[:, :, 0])
    return np.asarray(stats.f.sf(wald / L, L, forms.df) >= 0.05)


def check(found: ConfidenceSet, forms: ar.ReducedForms) -> int:
    """The set holds every accepted angle; it holds no other unless it says it spans pieces."""
    inside = accepted(forms)
    covered = np.array([found.covers(float(a)) for a in np.tan(ANGLES)])
    assert (covered >= inside).all()
    pieces = int(np.sum(inside & ~np.roll(inside, 1)))
    if pieces <= 1:
        np.testing.assert_array_equal(covered, inside)
        assert "pieces" not in found.method
    else:
        assert f"{pieces} pieces" in found.method
    if found.shape in (Shape.INTERVAL, Shape.RAYS):
        for end in (found.low, found.high):
            assert ar.anderson_rubin_test(forms, end).p_value == pytest.approx(0.05, rel=1e-5)
    return pieces


@pytest.mark.parametrize("L", [1, 2, 3])
def test_sets_equal_brute_force_in_every_shape(L: int) -> None:
    shapes = set()
    for seed in range(12):
        for strength in (0.3, 1.5, 4.0):
            forms = random_forms(seed, L, strength)
            found = ar.anderson_rubin_set(forms, 0.95)
            check(found, forms)
            shapes.add(found.shape)
    assert shapes == set(Shape) - ({Shape.EMPTY} if L == 1 else set())


def test_a_set_in_pieces_is_covered_and_said() -> None:
    # Found by search: two instruments whose accepted stretches are apart, once with and once
    # without infinity among them.
    shapes = set()
    for seed in (31, 38, 57, 58):
        rng = np.random.default_rng(seed)
        root = rng.normal(size=(4, 4))
        forms = ar.ReducedForms(
            rng.uniform(1, 4) * rng.normal(size=2),
            rng.uniform(1, 4) * rng.normal(size=2),
            root @ root.T / 4,
            40.0,
        )
        found = ar.anderson_rubin_set(forms, 0.95)
        assert check(found, forms) == 2
        shapes.add(found.shape)
    assert shapes == {Shape.INTERVAL, Shape.RAYS}


@pytest.mark.parametrize(
    ("coefficients", "shape", "ends"),
    [
        ((1.0, -3.0, 2.0), Shape.INTERVAL, (1.0, 2.0)),
        ((-1.0, 3.0, -2.0), Shape.RAYS, (1.0, 2.0)),
        ((-1.0, 0.0, -1.0), Shape.LINE, None),
        ((1.0, 0.0, 1.0), Shape.EMPTY, None),
        ((0.0, 2.0, -4.0), Shape.INTERVAL, (-np.inf, 2.0)),
        ((0.0, -2.0, 4.0), Shape.INTERVAL, (2.0, np.inf)),
        ((0.0, 0.0, -1.0), Shape.LINE, None),
        ((0.0, 0.0, 1.0), Shape.EMPTY, None),
        ((1.0, -1e8, 1.0), Shape.INTERVAL, (1e-8, 1e8)),
        ((1.0, 0.0, 0.0), Shape.INTERVAL, (0.0, 0.0)),
    ],
)
def test_quadratic_by_hand(
    coefficients: tuple[float, float, float], shape: Shape, ends: tuple[float, float] | None
) -> None:
    found = ar.quadratic_set(*coefficients, 0.95)
    assert found.shape is shape
    if ends is None:
        assert np.isnan(found.low)
        assert np.isnan(found.high)
    else:
        assert (found.low, found.high) == pytest.approx(ends, rel=1e-12)


def test_units_of_outcome_and_treatment() -> None:
    forms = random_forms(3, 2, 4.0)
    weight = np.repeat([1e-6, 1e5], 2)
    other = ar.ReducedForms(
        forms.outcome * 1e-6,
        forms.treatment * 1e5,
        forms.covariance * np.outer(weight, weight),
        forms.df,
    )
    one, scaled = ar.anderson_rubin_set(forms, 0.9), ar.anderson_rubin_set(other, 0.9)
    assert scaled.shape is one.shape
    assert (scaled.low * 1e11, scaled.high * 1e11) == pytest.approx((one.low, one.high), rel=1e-8)


def test_the_test_at_the_ends_has_p_of_one_less_level() -> None:
    forms = random_forms(1, 2, 4.0)
    found = ar.anderson_rubin_set(forms, 0.95)
    for end in (found.low, found.high):
        assert ar.anderson_rubin_test(forms, end).p_value == pytest.approx(0.05, rel=1e-6)
