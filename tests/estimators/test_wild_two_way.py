"""The two-way wild bootstrap against a loop that refits every draw on the rows."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from pipeline.core.design import Design, FitOptions
from pipeline.estimators import wild, wild_two_way
from pipeline.estimators.covariance import groups_of, intersection
from pipeline.estimators.errors import CLUSTER, ErrorRule
from pipeline.estimators.least_squares import fixed_effects, ols
from pipeline.estimators.sample import Sample, plain, within
from tests.estimators.test_few_clusters import small
from tests.estimators.test_least_squares import dummies


def two_way(effects: tuple[str, ...] = (), seed: int = 4, groups: int = 8) -> Design:
    design = small(seed, groups=groups, n=160)
    rng = np.random.default_rng(seed + 100)
    month = rng.integers(0, 13, size=design.n)
    X = design.X.copy()
    X[:, 2] = rng.normal(size=design.n)
    y = design.y + 0.6 * rng.normal(size=13)[month]
    known = {**design.effects, **design.clusters, "month": month}
    return replace(
        design,
        X=X,
        y=y,
        effects={name: known[name] for name in effects},
        clusters={"acquirer": design.clusters["acquirer"], "month": month},
    )


def sample_of(design: Design) -> Sample:
    if design.effects:
        return within(design, FitOptions(cluster=True))
    return plain(design, ErrorRule(CLUSTER, dict(design.clusters), design.n))


def refits(design: Design, k: int, null: float, draws: np.ndarray) -> np.ndarray:
    """t* of the data, then of each draw under the null, every indicator a column."""
    wide = dummies(design)
    at = wide.names.index("treatment")
    X = wide.X
    few, many = design.clusters["acquirer"], design.clusters["month"]
    others = np.delete(X, at, axis=1)
    fitted = null * X[:, at] + others @ np.linalg.lstsq(others, design.y - null * X[:, at])[0]
    left = design.y - fitted
    bread = np.linalg.pinv(X.T @ X)
    n = design.n

    def t_of(y: np.ndarray) -> float:
        b = bread @ (X.T @ y)
        rows = (X @ bread[at]) * (y - X @ b)
        parts = []
        for codes in (few, many, intersection(few, many)):
            sums, G = np.bincount(codes, weights=rows), groups_of(codes)
            parts.append(G / (G - 1) * (n - 1) / (n - k) * float(sums @ sums))
        one, two, both = parts
        return float(b[at] - null) / np.sqrt(max(one + two - both, one, two))

    return np.array([t_of(fitted + left * v[few]) for v in (np.ones(8), *draws)])


@pytest.mark.parametrize("effects", [(), ("year",), ("acquirer", "year"), ("month",)])
@pytest.mark.parametrize("kind", [wild.SIGNS, wild.WEBB])
@pytest.mark.parametrize("null", [0.0, 0.45])
def test_p_is_that_of_refits(effects: tuple[str, ...], kind: str, null: float) -> None:
    design = two_way(effects)
    moved = replace(design, y=design.y - null * design.X[:, 1])
    sample = sample_of(moved)
    if design.effects:
        design = replace(design, **parts_kept(design, sample))
    codes = [c[sample.kept] for c in moved.clusters.values()]
    found = wild_two_way.bootstrap(sample, moved, codes[0], codes[1], draws=300, kind=kind)
    blocks, enumerated = wild.weight_blocks(8, 300, kind)
    draws = np.concatenate(list(blocks))
    t, *drawn = refits(design, len(sample.names) + sample.counted, null, draws)
    assert found.statistic == pytest.approx(t, rel=1e-9)
    hits = int(np.sum(np.abs(drawn) >= abs(t) * (1 - 1e-9)))
    expected = hits / len(drawn) if enumerated else (1 + hits) / (1 + len(drawn))
    assert found.p_value == pytest.approx(expected, abs=1e-12)


def parts_kept(design: Design, sample: Sample) -> dict[str, object]:
    kept = sample.kept
    return {
        "y": design.y[kept],
        "X": design.X[kept],
        "rows": tuple(np.array(design.rows)[kept]),
        "Z": design.Z[kept],
        "effects": {name: c[kept] for name, c in design.effects.items()},
        "clusters": {name: c[kept] for name, c in design.clusters.items()},
    }


def test_the_set_is_where_the_test_turns() -> None:
    design = two_way()
    sample = sample_of(design)
    first, second = design.clusters.values()

    def p(value: float) -> float:
        moved = replace(design, y=design.y - value * design.X[:, 1])
        one = sample_of(moved)
        return wild_two_way.bootstrap(one, moved, first, second, draws=999).p_value

    found = wild_two_way.bootstrap(sample, design, first, second, draws=999)
    step = 1e-6 * found.std_error
    for end, inward in ((found.set.low, 1), (found.set.high, -1)):
        assert p(end + inward * step) > 0.05 >= p(end - inward * step)


def test_which_dimension_comes_first_does_not_matter() -> None:
    design = two_way()
    sample = sample_of(design)
    first, second = design.clusters.values()
    one = wild_two_way.bootstrap(sample, design, first, second, draws=500)
    other = wild_two_way.bootstrap(sample, design, second, first, draws=500)
    assert one == other


@pytest.mark.parametrize("effects", [(), ("year",)])
def test_its_error_is_the_two_way_one_where_that_is_the_largest(effects: tuple[str, ...]) -> None:
    design = two_way(effects)
    sample = sample_of(design)
    first, second = (codes[sample.kept] for codes in design.clusters.values())
    found = wild_two_way.bootstrap(sample, design, first, second, draws=100)
    fit = fixed_effects if effects else ols
    column = fit(design, FitOptions(cluster=True))
    alone = [
        fit(replace(design, clusters={name: codes}), FitOptions(cluster=True))
        for name, codes in design.clusters.items()
    ]
    expected = max(one.term("treatment")["std_error"] for one in (column, *alone))
    assert found.std_error == pytest.approx(expected, rel=1e-8)
