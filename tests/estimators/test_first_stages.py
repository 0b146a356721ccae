"""Strength and rank of the instruments: limits, identities, and what several variables add."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import NotApplicable, TestResult
from pipeline.core.findings import InputProblem
from pipeline.estimators import first_stages
from pipeline.estimators.gmm import two_step_gmm
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.k_class import fuller, limited_information
from pipeline.estimators.stages import parts_of
from tests.contract import test_estimators as contract
from tests.estimators.designs import deals, one_cluster_dimension
from tests.estimators.several import EFFECTS, two_chosen

FITS = (two_stage_least_squares, limited_information, fuller, two_step_gmm)
OPTIONS = [FitOptions(), FitOptions(covariance="classical"), FitOptions(covariance="hc1")]


def value(result: object) -> float:
    assert isinstance(result, TestResult)
    return result.statistic


@pytest.fixture(scope="module")
def design() -> Design:
    return two_chosen()


@pytest.mark.parametrize("options", OPTIONS)
def test_with_one_variable_all_of_them_are_the_first_stage_f(options: FitOptions) -> None:
    parts = parts_of(one_cluster_dimension(deals()), options)
    column = two_stage_least_squares(one_cluster_dimension(deals()), options)
    plain = value(column.tests["robust_f"])
    assert value(first_stages.conditional_f(parts, 0)) == pytest.approx(plain, rel=1e-9)
    assert value(first_stages.rank_f(parts)) == pytest.approx(plain, rel=1e-9)
    assert value(first_stages.individual_f(parts, 0)) == pytest.approx(plain, rel=1e-9)
    assert first_stages.shea_r_squared(parts)[0] == pytest.approx(column.fit["partial_r_squared"])
    assert isinstance(column.tests["underidentification"], TestResult)


def test_classical_rank_lm_of_one_variable_is_n_times_r_squared() -> None:
    options = FitOptions(covariance="classical")
    column = two_stage_least_squares(deals(), options)
    expected = column.n * column.fit["partial_r_squared"]
    assert value(column.tests["underidentification"]) == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize("fit", FITS)
def test_every_column_gives_all_coefficients_and_each_first_stage(
    fit: object, design: Design
) -> None:
    assert callable(fit)
    column = fit(design, FitOptions())
    assert set(design.also_endogenous) | {"paid_in_shares", "cash", "run_up"} == set(column.names)
    for name, truth in zip(("paid_in_shares", "relative_size"), EFFECTS, strict=True):
        term = column.term(name)
        assert abs(term["coefficient"] - truth) < 4 * term["std_error"]
    titles = [stage.title for stage in column.stages]
    assert titles == [
        "First stage of paid in shares",
        "First stage of relative size",
        "Reduced form",
    ]
    for stage in column.stages[:2]:
        assert set(stage.tests) == {"conditional_f", "robust_f"}
        assert {"shea_r_squared", "partial_r_squared"} <= set(stage.fit)
    assert {"rank_f", "underidentification", "anderson_rubin", "wu_hausman"} <= set(column.tests)
    assert "effective_f" not in column.tests
    assert column.robust_set is column.sets["anderson_rubin"]
    assert "projection" in column.interval.method
    assert "held fixed" in column.estimand
    names = [test.name for stage in column.stages for test in stage.tests.values()]
    names += [test.name for test in column.tests.values()]
    assert len({name for name in names if "F" in name}) == 3
    assert not any("Wald" in name for name in names)


def test_one_movement_for_two_variables_is_seen_though_each_f_is_large(design: Design) -> None:
    """Both variables follow the first instrument; nothing tells them apart."""
    rng = np.random.default_rng(0)
    z = design.Z[:, 0]
    X = design.X.copy()
    X[:, 1], X[:, 2] = 2 * z + rng.normal(size=design.n), 3 * z + rng.normal(size=design.n)
    column = two_stage_least_squares(replace(design, X=X, effects={}), FitOptions())
    for stage in column.stages[:2]:
        assert value(stage.tests["robust_f"]) > 100
        assert value(stage.tests["conditional_f"]) < 10
        assert stage.fit["partial_r_squared"] > 0.5 > 0.1 > stage.fit["shea_r_squared"]
    result = column.tests["underidentification"]
    assert isinstance(result, TestResult)
    assert result.p_value > 0.01
    assert sum("hardly tell" in note for note in column.notes) == 2


def test_which_variable_comes_first_does_not_matter(design: Design) -> None:
    other = replace(design, treatment="relative_size", also_endogenous=("paid_in_shares",))
    one, two = (two_stage_least_squares(d, FitOptions()) for d in (design, other))
    for name in one.names:
        assert two.term(name) == pytest.approx(one.term(name), rel=1e-8)
    for key in (
        "rank_f",
        "underidentification",
        "anderson_rubin",
        "wu_hausman",
        "overidentification",
    ):
        assert value(two.tests[key]) == pytest.approx(value(one.tests[key]), rel=1e-7)


def test_as_many_instruments_as_variables(design: Design) -> None:
    exact = replace(design, Z=design.Z[:, :2], instruments=design.instruments[:2])
    columns = [fit(exact, FitOptions()) for fit in FITS]
    for column in (columns[1], columns[3]):
        np.testing.assert_allclose(column.coefficients, columns[0].coefficients, rtol=1e-8)
    assert isinstance(columns[0].tests["overidentification"], NotApplicable)
    assert "liml" not in columns[0].fit


def rule_of(design: Design, fit: object, options: FitOptions = OPTIONS[0]) -> tuple[str, str, str]:
    assert callable(fit)
    with pytest.raises(InputProblem) as caught:
        fit(design, options)
    finding = caught.value.findings[0]
    return finding.rule, finding.column, finding.got


@pytest.mark.parametrize("fit", FITS)
def test_what_cannot_be_told_is_refused(fit: object, design: Design) -> None:
    rng = np.random.default_rng(3)
    Z, X, n = design.Z, design.X, design.n
    names = design.instruments

    def with_z(columns: np.ndarray, labels: tuple[str, ...]) -> Design:
        return replace(design, Z=columns, instruments=labels)

    rule, _, got = rule_of(with_z(Z[:, :1], names[:1]), fit)
    assert (rule, got) == (
        "under_identified",
        "1 instrument for 2 endogenous variables (paid_in_shares, relative_size)",
    )
    own = np.column_stack([Z[:, :2], X[:, 2]])
    assert rule_of(with_z(own, (*names[:2], "relative_size")), fit)[:2] == (
        "instrument_is_treatment",
        "relative_size",
    )
    near = np.column_stack([Z[:, :2], X[:, 2] + 1e-4 * rng.normal(size=n)])
    assert rule_of(with_z(near, (*names[:2], "other")), fit)[:2] == (
        "instrument_is_treatment",
        "other",
    )
    control = np.column_stack([Z[:, :2], X[:, 4]])
    assert rule_of(with_z(control, (*names[:2], "run_up")), fit)[0] == "instrument_is_control"
    twice = np.column_stack([Z[:, :2], 2 * X[:, 4]])
    assert rule_of(with_z(twice, (*names[:2], "other")), fit)[0] == "instrument_collinear"
    fixed = np.column_stack([Z[:, :2], design.effects["year"].astype(float)])
    assert rule_of(with_z(fixed, (*names[:2], "other")), fit)[:2] == ("absorbed", "other")
    held = X.copy()
    held[:, 2] = design.effects["year"]
    assert rule_of(replace(design, X=held), fit)[:2] == ("absorbed", "relative_size")
    double = X.copy()
    double[:, 2] = 2 * X[:, 1]
    assert rule_of(replace(design, X=double), fit)[0] == "collinear"
    constant = X.copy()
    constant[:, 2] = 1.0
    assert rule_of(replace(design, X=constant), fit)[0] == "no_variation"
    assert rule_of(replace(design, X=constant, effects={}), fit)[0] == "collinear"
    half = {"half": np.arange(n) % 2}
    assert rule_of(replace(design, clusters=half), fit)[0] == "too_many_instruments"
    lone = {"acquirer": np.zeros(n, dtype=int)}
    assert rule_of(replace(design, clusters=lone), fit)[0] == "one_cluster"
    missing = {"acquirer": np.where(np.arange(n) == 3, -1, design.clusters["acquirer"])}
    assert rule_of(replace(design, clusters=missing), fit)[0] == "cluster_missing"


@pytest.mark.parametrize("fit", FITS)
def test_instruments_that_move_both_in_one_proportion_only(fit: object) -> None:
    """In sample the predictions are multiples of one another: no coefficient has a value."""
    rng = np.random.default_rng(5)
    n = 200
    Z, _ = np.linalg.qr(rng.normal(size=(n, 6)))
    Z -= Z.mean(axis=0)
    Q, _ = np.linalg.qr(np.column_stack([np.ones(n), Z]))
    z, noise = Q[:, 1:4], Q[:, 4:6]
    D = np.column_stack([z[:, 0] + noise[:, 0], 2 * z[:, 0] + noise[:, 1]])
    design = Design(
        y=D[:, 0] + rng.normal(size=n),
        X=np.column_stack([np.ones(n), D]),
        names=("constant", "one", "two"),
        treatment="one",
        rows=tuple(map(str, range(n))),
        outcome="CAR",
        Z=z,
        instruments=("a", "b", "c"),
        also_endogenous=("two",),
    )
    rule, column, _ = rule_of(design, fit)
    assert (rule, column) == ("under_identified", "one, two")


def test_a_variable_taken_out_of_the_equation_is_endogenous_no_more(design: Design) -> None:
    with pytest.raises(ValueError, match="also_endogenous"):
        replace(design, also_endogenous=("paid_in_shares",))
    names = tuple(name for name in design.names if name != "relative_size")
    less = replace(design, X=np.delete(design.X, 2, axis=1), names=names)
    assert less.endogenous == ("paid_in_shares",)
    one = two_stage_least_squares(less, FitOptions())
    other = two_stage_least_squares(replace(less, also_endogenous=()), FitOptions())
    np.testing.assert_array_equal(one.coefficients, other.coefficients)


@pytest.mark.parametrize("fit", [limited_information, two_step_gmm])
@pytest.mark.parametrize(
    "promise",
    [
        contract.test_row_order_does_not_matter,
        contract.test_outcome_in_percent,
        contract.test_unit_of_a_control,
        contract.test_constant_added_to_the_outcome,
        contract.test_covariance_is_a_covariance,
    ],
)
def test_the_estimators_promises_hold_for_two_variables(
    fit: object, promise: object, design: Design
) -> None:
    assert callable(promise)
    promise(fit, FitOptions(), design)


@pytest.mark.parametrize("fit", FITS)
@pytest.mark.parametrize("also", [(), ("relative_size",)])
def test_without_one_cluster_is_the_refit(fit: object, also: tuple[str, ...]) -> None:
    assert callable(fit)
    design = replace(two_chosen(n=160, groups=9), effects={}, also_endogenous=also)
    column = fit(design, FitOptions(draws=9))
    codes, found = design.clusters["acquirer"], []
    for g in range(9):
        stays = codes != g
        rest = replace(
            design,
            y=design.y[stays],
            X=design.X[stays],
            Z=design.Z[stays],
            rows=tuple(np.array(design.rows)[stays]),
            clusters={"acquirer": codes[stays]},
        )
        found.append(fit(rest, FitOptions()).term("paid_in_shares")["coefficient"])
    assert column.fit["without_one_acquirer_lowest"] == pytest.approx(min(found), rel=1e-9)
    assert column.fit["without_one_acquirer_highest"] == pytest.approx(max(found), rel=1e-9)
    assert column.fit["without_one_acquirer_failed"] == 0
    assert "without_one_acquirer_lowest" not in fit(design, FitOptions()).fit
