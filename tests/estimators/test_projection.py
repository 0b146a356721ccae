"""The projected Anderson-Rubin set against exact decisions and brute force."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import ConfidenceSet, Shape
from pipeline.core.findings import InputProblem
from pipeline.estimators import anderson_rubin as ar
from pipeline.estimators.clustered_forms import inverted_forms
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.projection import combined, projected_set, smallest
from pipeline.estimators.stages import parts_of
from tests.estimators.several import two_chosen

ANGLES = (np.arange(60) + 0.5) / 60 * np.pi - np.pi / 2


def forms(seed: int, L: int, m: int, strength: float) -> ar.ReducedForms:
    rng = np.random.default_rng(seed)
    root = rng.normal(size=(m * L, m * L + 2))
    columns = strength * rng.normal(size=(L, m))
    return ar.ReducedForms(
        columns[:, 0], columns[:, 1], root @ root.T / 10, 40.0, others=columns[:, 2:]
    )


@pytest.mark.parametrize("L", [2, 3, 5])
@pytest.mark.parametrize("strength", [0.5, 1.5, 4.0, 30.0])
def test_two_variables_are_decided_as_by_minimising(L: int, strength: float) -> None:
    """A value is in the shadow if the least statistic over the other coefficient is accepted."""
    for seed in range(2):
        known = forms(seed, L, 3, strength)
        found, bound = projected_set(known, 0.95), known.bound(0.95)
        for angle in ANGLES:
            c, s = float(np.cos(angle)), float(np.sin(angle))
            space = np.array([[c, 0.0], [-s, 0.0], [0.0, 1.0]])
            if smallest(known, space)[0] <= bound:
                assert found.covers(s / c)
            elif "pieces" not in found.method:
                assert not found.covers(s / c)


def test_three_variables_against_brute_force() -> None:
    known = forms(2, 4, 4, 3.0)
    rng = np.random.default_rng(0)
    weights = rng.normal(size=(40_000, 4))
    blocks = known.covariance.reshape(4, 4, 4, 4)
    spread = np.einsum("ni,ikjl,nj->nkl", weights, blocks, weights, optimize=True)
    side = weights @ known.columns.T
    values = np.einsum("nl,nl->n", side, np.linalg.solve(spread, side[:, :, None])[:, :, 0])
    least, at = smallest(known, np.eye(4))
    assert combined(known, np.eye(4)).covariance == pytest.approx(known.covariance)
    assert least <= values.min()
    assert ar.along(known, at) == pytest.approx(least, rel=1e-9)
    found = projected_set(known, 0.95)
    accepted = weights[values <= known.bound(0.95)]
    assert len(accepted) > 50
    assert all(found.covers(float(-w[1] / w[0])) for w in accepted)


@pytest.mark.parametrize("strength", [0.02, 0.6, 6.0])
def test_ends_are_just_accepted_and_the_truth_of_the_joint_test_holds(strength: float) -> None:
    parts = parts_of(two_chosen(strength=strength), FitOptions())
    known = inverted_forms(parts)
    found: ConfidenceSet = projected_set(known, 0.95)
    if found.shape in (Shape.INTERVAL, Shape.RAYS):
        for end in (found.low, found.high):
            ray = np.array([[1.0, 0.0], [-end, 0.0], [0.0, 1.0]])
            assert smallest(known, ray)[0] == pytest.approx(known.bound(0.95), rel=1e-5)
    else:
        assert strength < 0.1


def test_units_do_not_matter() -> None:
    design = two_chosen()
    X = design.X.copy()
    X[:, 1], X[:, 2] = 1e5 * X[:, 1], 1e-3 * X[:, 2]
    one = two_stage_least_squares(design, FitOptions()).interval
    other = two_stage_least_squares(replace(design, X=X), FitOptions()).interval
    assert other.shape is one.shape
    assert (1e5 * other.low, 1e5 * other.high) == pytest.approx((one.low, one.high), rel=1e-5)


def test_the_shadow_is_wider_than_the_usual_interval_and_holds_the_estimate() -> None:
    column = two_stage_least_squares(two_chosen(), FitOptions())
    usual = column.sets["wald"]
    assert column.interval.covers(column.term("paid_in_shares")["coefficient"])
    assert column.interval.high - column.interval.low > usual.high - usual.low


def test_an_instrument_that_combines_two_chosen_variables_is_refused() -> None:
    """Neither variable is reproduced alone."""
    design = two_chosen()
    mixed = design.X[:, 1] + design.X[:, 2]
    Z = np.column_stack([design.Z[:, :2], mixed])
    with pytest.raises(InputProblem) as caught:
        two_stage_least_squares(
            replace(design, Z=Z, instruments=("first", "second", "mix")), FitOptions()
        )
    (finding,) = caught.value.findings
    assert (finding.rule, finding.column) == ("instrument_is_treatment", "mix")
    assert "a combination of paid_in_shares and relative_size" in finding.got


def test_rows_must_suffice_for_the_errors_of_every_equation() -> None:
    """Two chosen variables: three residuals a deal, so three deals beyond the coefficients."""
    design = two_chosen(n=420)
    bare = replace(design, effects={}, clusters={})

    def first(n: int) -> Design:
        return replace(bare, y=bare.y[:n], X=bare.X[:n], Z=bare.Z[:n], rows=bare.rows[:n])

    with pytest.raises(InputProblem) as caught:
        two_stage_least_squares(first(9), FitOptions())
    assert caught.value.findings[0].rule == "few_rows"
    assert two_stage_least_squares(first(10), FitOptions()).n == 10
