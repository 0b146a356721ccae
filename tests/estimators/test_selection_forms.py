"""Selection with instruments and few clusters: the test, its set and what is refused."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import linalg, stats

from pipeline.core.design import Design, FitOptions, SelectionRows
from pipeline.core.estimate import Shape, TestResult
from pipeline.core.findings import InputProblem
from pipeline.estimators import probit
from pipeline.estimators.selection_iv import selection_two_stage
from tests.estimators.designs import deals, without


@pytest.fixture(scope="module")
def design() -> Design:
    return without(deals(), "effects", "clusters")


def candidates(design: Design) -> SelectionRows:
    assert design.selection is not None
    return design.selection


def in_clusters(design: Design, groups: int, seed: int = 3) -> Design:
    s = candidates(design)
    codes = np.random.default_rng(seed).integers(0, groups, size=len(s.selected))
    return replace(design, selection=replace(s, clusters={"region": codes}))


def coefficients(design: Design, keep: np.ndarray) -> np.ndarray:
    """Outcome and treatment on instruments, controls and λ, from the candidates in ``keep``."""
    s = candidates(design)
    W, chosen, row = s.W[keep], s.selected[keep], s.outcome_row[keep]
    fit = probit.fit_probit(probit.Equation(chosen, W, s.names, "a", s.names[-1]))
    a = W[chosen] @ fit.coefficients
    ratio = stats.norm.pdf(a) / stats.norm.cdf(a)
    rows = row[chosen]
    X = np.column_stack([design.Z[rows], np.delete(design.X[rows], 1, axis=1), ratio])
    both = np.column_stack([design.y[rows], design.X[rows, 1]])
    return np.asarray(linalg.lstsq(X, both)[0][: design.Z.shape[1]].T.ravel())


def test_statistic_is_that_of_both_steps_fitted_again_without_each_cluster(design: Design) -> None:
    """A brute-force jackknife over clusters of candidates; one Newton step stands for a probit."""
    clustered = in_clusters(design, 12)
    codes = candidates(clustered).clusters["region"]
    whole = coefficients(clustered, np.ones(len(codes), dtype=bool))
    moves = np.array([coefficients(clustered, codes != g) - whole for g in range(12)])
    L = clustered.Z.shape[1]
    V = (11 / 12 * moves.T @ moves)[:L, :L]
    wanted = float(whole[:L] @ np.linalg.solve(V, whole[:L]))
    test = selection_two_stage(clustered, FitOptions()).tests["anderson_rubin"]
    assert isinstance(test, TestResult)
    assert test.df is not None
    rest = float(test.df[1])
    statistic = test.statistic * L * (rest + L - 1) / rest
    assert statistic == pytest.approx(wanted, rel=0.05)
    assert rest + L - 1 < 11


def test_many_even_clusters_change_little(design: Design) -> None:
    alone = selection_two_stage(without_clusters(design), FitOptions())
    s = candidates(design)
    single = replace(design, selection=replace(s, clusters={"own": np.arange(len(s.selected))}))
    clustered = selection_two_stage(single, FitOptions())
    one, other = alone.sets["anderson_rubin"], clustered.sets["anderson_rubin"]
    assert 1 < (other.high - other.low) / (one.high - one.low) < 1.1


def without_clusters(design: Design) -> Design:
    return replace(design, selection=replace(candidates(design), clusters={}))


def test_true_values_are_rejected_about_as_often_as_said() -> None:
    """Eight clusters, weak instruments: F(L, G - 1) on plain cluster sums rejects over 20%."""
    rejected = [
        not selection_two_stage(few(np.random.default_rng(seed)), FitOptions())
        .sets["anderson_rubin"]
        .covers(0.0)
        for seed in range(60)
    ]
    # At a level of 5% more than eight of sixty has a probability below one in a hundred.
    assert sum(rejected) <= 8


def few(rng: np.random.Generator, groups: int = 8, each: int = 30) -> Design:
    """No effect; clusters share half of every variable's variance."""
    A = groups * each
    region = np.repeat(np.arange(groups), each)

    def shared() -> np.ndarray:
        return np.asarray(0.7 * rng.normal(size=groups)[region] + 0.7 * rng.normal(size=A))

    w, z, reason, v = shared(), np.column_stack([shared(), shared()]), shared(), rng.normal(size=A)
    selected = 0.3 + w + v > 0
    D = z @ np.array([0.3, 0.3]) + reason
    y = 0.8 * reason + 0.5 * v + shared()
    n = int(selected.sum())
    row = np.full(A, -1)
    row[selected] = np.arange(n)
    return Design(
        y=y[selected],
        X=np.column_stack([np.ones(n), D[selected]]),
        names=("constant", "share"),
        treatment="share",
        rows=tuple(f"deal {at}" for at in range(n)),
        outcome="return",
        Z=z[selected],
        instruments=("first", "second"),
        selection=SelectionRows(
            W=np.column_stack([np.ones(A), w]),
            names=("constant", "divisions_for_sale"),
            excluded=("divisions_for_sale",),
            selected=selected,
            outcome_row=row,
            clusters={"region": region},
        ),
    )


def test_fewer_clusters_than_instruments_bound_nothing(design: Design) -> None:
    """With a strong first stage too the unbounded set is the one shown, and it is said."""
    column = selection_two_stage(in_clusters(design, 2), FitOptions())
    assert column.sets["anderson_rubin"].shape is Shape.LINE
    assert column.robust_set is column.sets["anderson_rubin"]
    assert any("do not bound the effect" in note for note in column.notes)


def test_two_dimensions_and_one_instrument(design: Design) -> None:
    s = candidates(in_clusters(design, 15))
    both = {**s.clusters, "month": np.random.default_rng(4).integers(0, 20, len(s.selected))}
    one = replace(design, Z=design.Z[:, :1], instruments=design.instruments[:1])
    one = replace(one, selection=replace(s, clusters=both))
    column = selection_two_stage(one, FitOptions())
    moved = replace(one, y=one.y + 3 * one.X[:, 1])
    shifted = selection_two_stage(moved, FitOptions()).sets["anderson_rubin"]
    kept = column.sets["anderson_rubin"]
    assert (shifted.low, shifted.high) == pytest.approx((kept.low + 3, kept.high + 3), rel=1e-7)


def test_one_cluster_that_holds_an_instrument_is_refused(design: Design) -> None:
    clustered = in_clusters(design, 12)
    s = candidates(clustered)
    inside = np.zeros(design.n)
    inside[s.outcome_row[s.selected & (s.clusters["region"] == 4)]] = 1.0
    Z = np.column_stack([design.Z[:, 0], inside])
    with pytest.raises(InputProblem) as caught:
        selection_two_stage(replace(clustered, Z=Z), FitOptions())
    assert caught.value.findings[0].rule == "cluster_decides"


def test_a_second_chosen_variable_is_refused(design: Design) -> None:
    with pytest.raises(InputProblem) as caught:
        selection_two_stage(replace(design, also_endogenous=("relative_size",)), FitOptions())
    (finding,) = caught.value.findings
    assert (finding.rule, finding.column) == ("one_endogenous", "relative_size")
