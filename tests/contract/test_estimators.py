"""What every estimator owes its caller, whatever it estimates."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from functools import cache
from importlib import import_module

import numpy as np
import pytest

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import Estimate
from pipeline.core.findings import InputProblem
from pipeline.estimators.covariance import cluster_sums
from pipeline.registry import ESTIMATORS, TABLE
from tests.estimators.designs import (
    arrays,
    deals,
    in_percent,
    measured,
    one_cluster_dimension,
    shuffled,
    with_column,
)

PATHS = tuple(entry.path for entry in TABLE[ESTIMATORS])
OPTIONS = {
    "auto": FitOptions(),
    "clustered": FitOptions(cluster=True),
    "hc1": FitOptions(covariance="hc1"),
    "classical": FitOptions(covariance="classical"),
}
Fit = Callable[[Design, FitOptions], Estimate]
WITHOUT_SCORES = ("heckman_two_step", "heckman_likelihood", "selection_two_stage", "switching_arm")
"""Their errors run over other rows than those they count: candidates, or both arms."""


def loaded(path: str) -> Fit:
    module, _, name = path.partition(":")
    found: Fit = getattr(import_module(module), name)
    return found


@cache
def has_classical(path: str) -> bool:
    """Whether the classical covariance exists; where not, the refusal names the key."""
    try:
        loaded(path)(measured(deals()), OPTIONS["classical"])
    except InputProblem as refused:
        (finding,) = refused.findings
        assert (finding.rule, finding.column) == ("covariance_option", "covariance")
        return False
    return True


def pytest_generate_tests(metafunc: pytest.Metafunc) -> None:
    """Every registered estimator, under every covariance it offers."""
    if "options" in metafunc.fixturenames:
        pairs = [
            pytest.param(loaded(path), choice, id=f"{path.partition(':')[2]}-{name}")
            for path in PATHS
            for name, choice in OPTIONS.items()
            if name != "classical" or has_classical(path)
        ]
        metafunc.parametrize(("fit", "options"), pairs)
    elif "fit" in metafunc.fixturenames:
        names = [path.partition(":")[2] for path in PATHS]
        metafunc.parametrize("fit", [loaded(path) for path in PATHS], ids=names)


@pytest.fixture(scope="module")
def design() -> Design:
    return measured(deals())


def same(one: Estimate, other: Estimate, rtol: float = 1e-7) -> None:
    """Equal but for rounding: sums are taken in another order."""
    np.testing.assert_allclose(one.coefficients, other.coefficients, rtol=rtol, atol=1e-12)
    np.testing.assert_allclose(one.std_errors, other.std_errors, rtol=rtol)
    np.testing.assert_allclose(one.p_values, other.p_values, rtol=1e-5, atol=1e-12)
    assert (one.n, one.df, one.clusters) == (other.n, other.df, other.clusters)


def test_row_order_does_not_matter(fit: Fit, options: FitOptions, design: Design) -> None:
    same(fit(design, options), fit(shuffled(design), options))


def test_same_design_same_bytes(fit: Fit, design: Design) -> None:
    one, other = fit(design, FitOptions()), fit(design, FitOptions())
    assert one.coefficients.tobytes() == other.coefficients.tobytes()
    assert one.covariance.tobytes() == other.covariance.tobytes()


def test_outcome_in_percent(fit: Fit, options: FitOptions, design: Design) -> None:
    one, hundred = fit(design, options), fit(in_percent(design), options)
    np.testing.assert_allclose(hundred.coefficients, 100 * one.coefficients, rtol=1e-8, atol=1e-12)
    np.testing.assert_allclose(hundred.std_errors, 100 * one.std_errors, rtol=1e-8)
    np.testing.assert_allclose(hundred.p_values, one.p_values, rtol=1e-6)
    for key, kept in one.sets.items():
        assert hundred.sets[key].shape is kept.shape
        np.testing.assert_allclose(hundred.sets[key].low, 100 * kept.low, rtol=1e-6)
        np.testing.assert_allclose(hundred.sets[key].high, 100 * kept.high, rtol=1e-6)


def test_unit_of_a_control(fit: Fit, options: FitOptions, design: Design) -> None:
    at = design.names.index("relative_size")
    X = design.X.copy()
    X[:, at] *= 1e6
    one, other = fit(design, options), fit(replace(design, X=X), options)
    weight = np.array([1e6 if name == "relative_size" else 1.0 for name in one.names])
    np.testing.assert_allclose(other.coefficients * weight, one.coefficients, rtol=1e-7, atol=1e-11)
    np.testing.assert_allclose(other.std_errors * weight, one.std_errors, rtol=1e-7)


def test_constant_added_to_the_outcome(fit: Fit, options: FitOptions, design: Design) -> None:
    one, other = fit(design, options), fit(replace(design, y=design.y + 0.5), options)
    moved = np.array([0.5 if name == "constant" else 0.0 for name in one.names])
    np.testing.assert_allclose(other.coefficients - moved, one.coefficients, rtol=1e-7, atol=1e-11)
    np.testing.assert_allclose(other.std_errors, one.std_errors, rtol=1e-6)


def test_fields_are_filled(fit: Fit, options: FitOptions, design: Design) -> None:
    column = fit(design, options)
    assert 0 < column.n <= design.n
    assert column.df > 0
    assert column.treatment == "paid_in_shares" in column.names
    for text in (
        column.estimator,
        column.title,
        column.estimand,
        column.df_rule,
        column.covariance_name,
        column.citation,
        column.outcome,
    ):
        assert text.strip()
    assert bool(column.clusters) == ("clustered" in column.covariance_name)
    if column.clusters:
        assert column.df == min(column.clusters.values()) - 1
    assert column.interval.covers(column.term("paid_in_shares")["coefficient"])


def test_words_claim_no_more_than_the_method(fit: Fit, design: Design) -> None:
    column = fit(design, FitOptions())
    texts = [column.estimand, *column.notes, *(stage.estimand for stage in column.stages)]
    texts += [getattr(test, "caution", "") for test in column.tests.values()]
    for text in texts:
        assert "cause" not in text.lower()
        assert "prove" not in text.lower()


def test_covariance_is_a_covariance(fit: Fit, options: FitOptions, design: Design) -> None:
    V = fit(design, options).covariance
    np.testing.assert_array_equal(V, V.T)
    scale = np.sqrt(np.diag(V))
    assert np.linalg.eigvalsh(V / np.outer(scale, scale))[0] > -1e-10


def test_design_is_left_alone(fit: Fit, design: Design) -> None:
    before = [array.copy() for array in arrays(design)]
    for array in arrays(design):
        array.flags.writeable = False
    try:
        fit(design, FitOptions())
    finally:
        for array in arrays(design):
            array.flags.writeable = True
    for array, kept in zip(arrays(design), before, strict=True):
        np.testing.assert_array_equal(array, kept)


def test_duplicate_column_is_refused_by_name(fit: Fit, design: Design) -> None:
    twice = with_column(design, "size_again", 3 * design.X[:, 2])
    with pytest.raises(InputProblem) as caught:
        fit(twice, FitOptions())
    (finding,) = caught.value.findings
    assert finding.rule == "collinear"
    assert {"relative_size", "size_again"} == set(finding.column.split(", "))


def test_treatment_without_variation_is_refused(fit: Fit, design: Design) -> None:
    X = design.X.copy()
    X[:, 1] = 1.0
    with pytest.raises(InputProblem) as caught:
        fit(replace(design, X=X), FitOptions())
    (finding,) = caught.value.findings
    assert (finding.rule, finding.column) == ("no_variation", "paid_in_shares")


def test_outcome_without_variation_is_refused(fit: Fit, design: Design) -> None:
    with pytest.raises(InputProblem) as caught:
        fit(replace(design, y=np.full(design.n, 0.01)), FitOptions())
    assert caught.value.findings[0].column == "outcome"


def test_one_cluster_is_refused(fit: Fit, design: Design) -> None:
    lone = {"acquirer": np.zeros(design.n, dtype=int)}
    selection = design.selection
    assert selection is not None
    selection = replace(
        selection, clusters={"acquirer": np.zeros(len(selection.selected), dtype=int)}
    )
    with pytest.raises(InputProblem) as caught:
        fit(replace(design, clusters=lone, selection=selection), FitOptions(cluster=True))
    assert caught.value.findings[0].rule == "one_cluster"


@pytest.mark.parametrize("key", ["hc0", "hc1", "clustered"])
def test_scores_make_the_robust_covariance(fit: Fit, key: str, design: Design) -> None:
    chosen = FitOptions(cluster=True) if key == "clustered" else FitOptions(covariance=key)
    one_way = one_cluster_dimension(design)
    column = fit(one_way, chosen)
    for part in (column, *column.stages):
        if part.scores is None:
            assert part.estimator in WITHOUT_SCORES
            continue
        size = np.abs(part.scores).sum(axis=0)
        assert (np.abs(part.scores.sum(axis=0)) <= 1e-9 * size).all()
        rows = part.scores
        if key == "clustered":
            rows = cluster_sums(rows, _codes(one_way, part))
        made = part.fit["small_sample_factor"] * rows.T @ rows
        np.testing.assert_allclose(made, part.covariance, rtol=1e-9, atol=1e-16)


def _codes(design: Design, column: Estimate) -> np.ndarray:
    selection = design.selection
    assert selection is not None
    candidates = column.n == len(selection.selected)
    clusters = selection.clusters if candidates else design.clusters
    assert column.n == len(clusters["acquirer"])
    return clusters["acquirer"]


def test_level_changes_the_intervals_only(fit: Fit, design: Design) -> None:
    wide, narrow = fit(design, FitOptions(level=0.99)), fit(design, FitOptions(level=0.9))
    np.testing.assert_array_equal(wide.coefficients, narrow.coefficients)
    np.testing.assert_array_equal(wide.covariance, narrow.covariance)
    assert (wide.intervals[:, 0] < narrow.intervals[:, 0]).all()
    assert wide.interval.level == 0.99
