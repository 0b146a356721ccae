"""Two-stage least squares: identities, refusals, sets and words."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import EstimationFailed, NotApplicable, Shape, TestResult
from pipeline.core.findings import InputProblem
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.least_squares import fixed_effects, ols
from pipeline.estimators.stages import parts_of, reduced_forms
from tests.estimators.designs import deals, with_instruments, without
from tests.estimators.several import two_chosen
from tests.estimators.test_least_squares import dummies

COVARIANCES = (
    FitOptions(),
    FitOptions(covariance="classical"),
    FitOptions(covariance="hc0"),
    FitOptions(covariance="hc1"),
)


@pytest.fixture(scope="module")
def design() -> Design:
    return deals()


def statistic(result: object) -> float:
    assert isinstance(result, TestResult)
    return result.statistic


@pytest.mark.parametrize("options", COVARIANCES)
def test_one_instrument_ties_everything_together(design: Design, options: FitOptions) -> None:
    one = with_instruments(design, 0)
    column = two_stage_least_squares(one, options)
    first, reduced = column.stages
    z, alpha = "treasury_shares", column.term("paid_in_shares")["coefficient"]
    # Indirect least squares.
    assert alpha == pytest.approx(reduced.term(z)["coefficient"] / first.term(z)["coefficient"])
    # Effective F = robust F = squared t of the first stage (Montiel Olea and Pflueger 2013).
    strength = statistic(column.tests["effective_f"])
    assert strength == pytest.approx(statistic(column.tests["robust_f"]), rel=1e-9)
    assert strength == pytest.approx(first.term(z)["statistic"] ** 2, rel=1e-6)
    # Anderson-Rubin at zero is the reduced form's squared t, and at the estimate it is zero.
    # With clusters the null is imposed on the errors as well.
    if not column.clusters:
        ar = statistic(column.tests["anderson_rubin"])
        assert ar == pytest.approx(reduced.term(z)["statistic"] ** 2, rel=1e-6)
    assert column.sets["anderson_rubin"].covers(alpha)
    assert isinstance(column.tests["overidentification"], NotApplicable)


@pytest.mark.parametrize("options", COVARIANCES)
def test_effects_taken_out_equal_indicators(design: Design, options: FitOptions) -> None:
    # Clustered by month: neither effect is nested, so both count every indicator.
    by_month = replace(design, clusters={"month": design.clusters["month"]})
    within = two_stage_least_squares(by_month, options)
    lsdv = two_stage_least_squares(dummies(by_month), options)
    for name in within.names:
        assert within.term(name) == pytest.approx(lsdv.term(name), rel=1e-7)
    for key, result in within.tests.items():
        assert statistic(result) == pytest.approx(statistic(lsdv.tests[key]), rel=1e-6)
    for key, found in within.sets.items():
        other = lsdv.sets[key]
        assert (found.low, found.high) == pytest.approx((other.low, other.high), rel=1e-6)
    for mine, theirs in zip(within.stages, lsdv.stages, strict=True):
        z = mine.treatment
        assert mine.term(z) == pytest.approx(theirs.term(z), rel=1e-7)


def test_treatment_as_good_as_its_own_instrument_is_least_squares(design: Design) -> None:
    # Instruments that predict the treatment well: two stages and least squares come together.
    D = design.X[:, 1]
    rng = np.random.default_rng(0)
    z = D + 0.05 * rng.normal(size=design.n)
    close = replace(design, Z=z[:, None], instruments=("nearly",), effects={}, clusters={})
    column = two_stage_least_squares(close, FitOptions())
    plain = ols(close, FitOptions(covariance="hc1"))
    assert column.term("paid_in_shares")["coefficient"] == pytest.approx(
        plain.term("paid_in_shares")["coefficient"],
        abs=0.1 * plain.term("paid_in_shares")["std_error"],
    )
    assert column.fit["least_squares"] == pytest.approx(plain.coefficients[1])
    assert column.robust_set is None
    assert column.interval.method == column.df_rule


def test_rule_of_the_headline_set(design: Design) -> None:
    for rows in ((0,), (1,), (0, 1)):
        column = two_stage_least_squares(with_instruments(design, *rows), FitOptions())
        weak = statistic(column.tests["effective_f"]) < 104.67
        assert (column.robust_set is column.sets["anderson_rubin"]) == weak
        assert (column.robust_set is None) != weak
        assert ("tf" in column.sets) == (len(rows) == 1)
        assert ("liml" in column.fit) == (len(rows) == 2)
        assert ("tf_critical_value" in column.fit) == (len(rows) == 1)
    assert (
        "tf" not in two_stage_least_squares(with_instruments(design, 0), FitOptions(level=0.9)).sets
    )


def test_no_first_stage_bounds_nothing(design: Design) -> None:
    noise = np.random.default_rng(5).normal(size=(design.n, 2))
    for columns, names in ((noise[:, :1], ("noise",)), (noise, ("noise", "more"))):
        column = two_stage_least_squares(
            replace(design, Z=columns, instruments=names), FitOptions()
        )
        assert column.interval.shape in (Shape.LINE, Shape.RAYS)
        notes = " ".join(column.notes)
        assert "instruments are weak" in notes
        assert "do not bound the effect" in notes


def test_instruments_that_disagree_leave_no_value(design: Design) -> None:
    # Each instrument is strong, and the second also moves the outcome on its own.
    broken = replace(design, y=design.y + 0.3 * design.Z[:, 1])
    column = two_stage_least_squares(broken, FitOptions(covariance="hc1"))
    assert column.sets["anderson_rubin"].shape is Shape.EMPTY
    assert any("set is empty" in note for note in column.notes)
    result = column.tests["overidentification"]
    assert isinstance(result, TestResult)
    assert result.p_value < 1e-6
    assert "goes unseen" in result.caution


def test_instruments_that_cannot_identify_are_refused(design: Design) -> None:
    D, run_up = design.X[:, 1], design.X[:, 3]
    rng = np.random.default_rng(1)
    z = design.Z[:, :1]
    two = ("treasury_shares", "other")

    def rule_of(**changes: object) -> tuple[str, str]:
        with pytest.raises(InputProblem) as caught:
            two_stage_least_squares(replace(design, **changes), FitOptions())  # type: ignore[arg-type]
        finding = caught.value.findings[0]
        return finding.rule, finding.column

    def pair(column: np.ndarray) -> np.ndarray:
        return np.column_stack([z, column])

    assert rule_of(instruments=(), Z=np.empty((0, 0)))[0] == "under_identified"
    assert rule_of(Z=pair(D), instruments=("treasury_shares", "paid_in_shares")) == (
        "instrument_is_treatment",
        "paid_in_shares",
    )
    assert rule_of(Z=pair(D + 1e-4 * rng.normal(size=design.n)), instruments=two) == (
        "instrument_is_treatment",
        "other",
    )
    assert rule_of(Z=pair(design.Z[:, 1]), instruments=("treasury_shares", "run_up")) == (
        "instrument_is_control",
        "run_up",
    )
    assert rule_of(Z=pair(2 * run_up), instruments=two, effects={}) == (
        "instrument_collinear",
        "run_up, other",
    )
    assert rule_of(Z=pair(3 * z[:, 0]), instruments=two) == (
        "instrument_collinear",
        "treasury_shares, other",
    )
    assert rule_of(Z=pair(design.effects["year"].astype(float)), instruments=two) == (
        "absorbed",
        "other",
    )
    assert rule_of(Z=pair(np.ones(design.n)), instruments=two)[0] == "no_variation"
    few = {"region": np.arange(design.n) % 2}
    assert rule_of(clusters=few)[0] == "too_many_instruments"


def test_hc3_is_not_for_two_stages(design: Design) -> None:
    with pytest.raises(InputProblem) as caught:
        two_stage_least_squares(design, FitOptions(covariance="hc3"))
    assert caught.value.findings[0].rule == "covariance_option"


def test_too_many_instruments_for_the_deals(design: Design) -> None:
    rows = slice(0, 12)
    rng = np.random.default_rng(2)
    small = replace(
        design,
        y=design.y[rows],
        X=design.X[rows],
        rows=design.rows[rows],
        effects={},
        clusters={},
        selection=None,
        Z=rng.normal(size=(12, 8)),
        instruments=tuple(f"z{at}" for at in range(8)),
    )
    with pytest.raises(InputProblem) as caught:
        two_stage_least_squares(small, FitOptions())
    assert caught.value.findings[0].rule == "few_rows"


def test_exact_outcome_is_withheld(design: Design) -> None:
    exact = replace(without(design, "effects"), y=design.X @ np.arange(1.0, 6.0))
    with pytest.raises(EstimationFailed, match="exactly"):
        two_stage_least_squares(exact, FitOptions())


def test_complier_share_of_a_binary_instrument(design: Design) -> None:
    column = two_stage_least_squares(with_instruments(design, 1), FitOptions())
    assert column.fit["complier_share"] == pytest.approx(
        column.stages[0].term("fast_placement")["coefficient"]
    )
    other = two_stage_least_squares(with_instruments(design, 0), FitOptions())
    assert "complier_share" not in other.fit


def test_same_rows_and_clusters_in_every_stage(design: Design) -> None:
    column = two_stage_least_squares(design, FitOptions())
    plain = fixed_effects(design, FitOptions())
    for part in (*column.stages, plain):
        assert part.n == column.n
        assert part.clusters == column.clusters
        assert part.df == column.df
        assert part.effects == column.effects
    assert "compliers" in column.estimand


def test_two_way_covariance_of_the_reduced_forms_is_usable(design: Design) -> None:
    forms = reduced_forms(parts_of(design, FitOptions(cluster=True)))
    scale = np.sqrt(np.diag(forms.covariance))
    assert np.linalg.eigvalsh(forms.covariance / np.outer(scale, scale))[0] > -1e-10


def test_a_large_f_of_two_clusters_does_not_bound_the_effect() -> None:
    one = with_instruments(replace(two_chosen(), also_endogenous=(), effects={}), 0)
    halves = replace(one, clusters={"half": np.arange(one.n) % 2})
    column = two_stage_least_squares(halves, FitOptions())
    assert statistic(column.tests["effective_f"]) > 104.67
    assert column.sets["anderson_rubin"].shape in (Shape.RAYS, Shape.LINE)
    assert column.interval is column.sets["anderson_rubin"]
    assert any("do not bound the effect" in note for note in column.notes)
