"""Fixed effects taken out, against the regression on their indicators."""

from __future__ import annotations

import numpy as np
import pytest

from pipeline.core.estimate import EstimationFailed
from pipeline.core.findings import InputProblem
from pipeline.estimators import absorb


def indicators(*effects: np.ndarray) -> np.ndarray:
    return np.column_stack([codes[:, None] == np.unique(codes) for codes in effects]).astype(float)


def by_indicators(Y: np.ndarray, *effects: np.ndarray) -> np.ndarray:
    D = indicators(*effects)
    return np.asarray(Y - D @ np.linalg.lstsq(D, Y, rcond=None)[0])


@pytest.mark.parametrize("how_many", [1, 2, 3])
def test_demeaning_is_the_projection_off_the_indicators(how_many: int) -> None:
    rng = np.random.default_rng(how_many)
    effects = [rng.integers(0, levels, size=300) for levels in (40, 9, 6)][:how_many]
    Y = rng.normal(size=(300, 3)) * [1e-3, 1.0, 1e6] + [5.0, 0.0, 1e7]
    left = absorb.demean(Y, {str(at): codes for at, codes in enumerate(effects)})
    # Against numpy's least squares on the indicators; 1e-9 of a column's spread is demanded.
    np.testing.assert_allclose(
        left / Y.std(axis=0), by_indicators(Y, *effects) / Y.std(axis=0), atol=1e-9
    )


def test_demeaning_a_chain_of_movers_converges() -> None:
    # Groups tied together by single movers: the slow case of plain alternation.
    n = 200
    firm, year = np.arange(n) // 2, (np.arange(n) + 1) // 2
    Y = np.random.default_rng(0).normal(size=(n, 1))
    left = absorb.demean(Y, {"firm": firm, "year": year})
    np.testing.assert_allclose(left, by_indicators(Y, firm, year), atol=1e-8)


def test_demeaning_that_does_not_converge_is_withheld(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(absorb, "MOST_ITERATIONS", 1)
    rng = np.random.default_rng(0)
    effects = {"a": rng.integers(0, 30, size=90), "b": rng.integers(0, 30, size=90)}
    with pytest.raises(EstimationFailed, match="no convergence"):
        absorb.demean(rng.normal(size=(90, 1)), effects)


def test_singletons_are_dropped_until_none_is_left() -> None:
    # Row 4 is alone in firm 2; without it row 3 is alone in year 1; then row 2 in firm 1.
    firm = np.array([0, 0, 1, 1, 2])
    year = np.array([0, 0, 0, 1, 1])
    keep = absorb.without_singletons({"firm": firm, "year": year})
    np.testing.assert_array_equal(keep, [True, True, False, False, False])


def test_codes_may_have_gaps() -> None:
    Y = np.array([[1.0], [3.0], [10.0], [14.0]])
    left = absorb.demean(Y, {"firm": np.array([7, 7, 90, 90])})
    np.testing.assert_allclose(left[:, 0], [-1, 1, -2, 2], atol=1e-12)


def test_nesting() -> None:
    firm, industry = np.array([0, 0, 1, 2]), np.array([0, 0, 0, 1])
    assert absorb.nested(firm, {"industry": industry})
    assert not absorb.nested(industry, {"firm": firm})
    assert not absorb.nested(firm, {})


@pytest.mark.parametrize("seed", range(6))
def test_coefficients_of_two_effects_are_the_rank(seed: int) -> None:
    rng = np.random.default_rng(seed)
    # Blocks that share no row: the graph of the two effects falls apart.
    block = rng.integers(0, 3, size=60)
    firm, year = block * 10 + rng.integers(0, 6, size=60), block * 5 + rng.integers(0, 3, size=60)
    rank = np.linalg.matrix_rank(indicators(firm, year))
    assert absorb.coefficients_of({"firm": firm, "year": year}) == rank
    third = rng.integers(0, 4, size=60)
    more = absorb.coefficients_of({"firm": firm, "year": year, "third": third})
    assert more >= np.linalg.matrix_rank(indicators(firm, year, third))


def test_a_column_the_effects_hold_constant_is_named() -> None:
    firm = np.repeat([0, 1, 2], 4)
    X = np.column_stack([np.arange(12.0), firm * 1e-6, np.full(12, 3.0)])
    left = absorb.demean(X, {"firm": firm})
    with pytest.raises(InputProblem) as caught:
        absorb.refuse_absorbed(X[:, :2], left[:, :2], ("size", "home_market"))
    finding = caught.value.findings[0]
    assert (finding.rule, finding.column) == ("absorbed", "home_market")
    assert finding.got == "absorbed by the fixed effects"
    with pytest.raises(InputProblem) as caught:
        absorb.refuse_absorbed(X[:, [0, 2]], left[:, [0, 2]], ("size", "always"))
    assert caught.value.findings[0].rule == "no_variation"
