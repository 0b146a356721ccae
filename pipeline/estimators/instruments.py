"""Two-stage least squares, with inference that weak instruments survive."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import (
    ConfidenceSet,
    Estimate,
    EstimationFailed,
    NotApplicable,
    Shape,
    Tested,
    TestResult,
    t_reach,
)
from pipeline.core.prices import Floats
from pipeline.estimators import effective_f as strength
from pipeline.estimators import first_stages, wild_instruments
from pipeline.estimators.algebra import solve
from pipeline.estimators.anderson_rubin import (
    ReducedForms,
    anderson_rubin_set,
    anderson_rubin_test,
)
from pipeline.estimators.clustered_forms import inverted_forms
from pipeline.estimators.diagnostics import wald
from pipeline.estimators.errors import (
    cautions,
    degrees_of_freedom,
    positive,
    sandwich,
    words,
)
from pipeline.estimators.instrument_tests import (
    Second,
    cragg_donald,
    homoskedastic_f,
    other_weights,
    overidentification,
    wu_hausman,
)
from pipeline.estimators.leave_out import without_each
from pipeline.estimators.projection import projected_set
from pipeline.estimators.stages import Parts, parts_of, reduced_forms

CITATION = "Theil (1953); Basmann (1957); Angrist and Imbens (1995)"
EXACT = 1e-20
WEAK_CONDITIONAL = 10.0
"""Rule of thumb for a first-stage F (Staiger and Stock 1997)."""


def two_stage_least_squares(design: Design, options: FitOptions) -> Estimate:
    """Least squares of the outcome on the controls and on what the instruments predict.

    X (n, k) and Z (n, L); p ≤ L of the regressors are endogenous, the treatment and
    ``design.also_endogenous``. Fixed effects, if the design has any, are first taken out of
    every column. Errors are clustered if the design has clusters and no other covariance is
    asked for, with t(min G - 1); HC1 with t(n - k) otherwise. ``robust_set`` is the
    Anderson-Rubin set while the effective F is below 104.67 or that set is unbounded, as a
    large F of few clusters may leave it; with p > 1, for which no such threshold is known,
    always the projection of the joint test.

    ``sets``: wald, anderson_rubin, tf (one instrument, level .95), wild_bootstrap (clusters and
    ``options.draws``). ``tests``: effective_f, robust_f, homoskedastic_f (p = 1) or rank_f
    (p > 1); underidentification, anderson_rubin (at 0, jointly), wu_hausman, overidentification,
    wild_bootstrap. ``stages``: the first stages, with robust_f and conditional_f each if p > 1,
    and the reduced form. ``fit``: least_squares, ratio (to it), partial_r_squared,
    shea_r_squared, cragg_donald_f (p > 1), sigma, small_sample_factor; singletons, absorbed,
    counted (effects); liml, liml_kappa, fuller (L > p), alone.<instrument> (p = 1 < L);
    tf_critical_value (L = 1); complier_share (treatment and single instrument 0 or 1);
    without_one_<dimension>_lowest, _highest, _failed (clusters and ``options.draws``).

    Raises:
        InputProblem: see :func:`~pipeline.estimators.stages.parts_of`.
        EstimationFailed: if the effects cannot be absorbed, the fit is exact or a variance is
            not positive.
    """
    parts = parts_of(design, options)
    rule = wild_instruments.TWO_STAGES
    return with_weak_instrument_checks(design, options, parts, _second_stage, rule)


def with_weak_instrument_checks(
    design: Design,
    options: FitOptions,
    parts: Parts,
    fit: Callable[[Parts], Second],
    weights: wild_instruments.Weights | None,
) -> Estimate:
    """A column around the second stage ``fit`` makes, however it weighs the instruments.

    Everything beside the second stage's own coefficients and errors is as in
    :func:`two_stage_least_squares`, whose names and citation it carries too. ``weights`` say
    how a bootstrap refits the second stage; None if it cannot.
    """
    second = fit(parts)
    forms, tested = reduced_forms(parts), inverted_forms(parts)
    several = len(parts.endogenous) > 1
    robust = (projected_set if several else anderson_rubin_set)(tested, options.level)
    effective = None if several else _effective(parts, forms)
    tests = _tests(parts, forms, tested, second)
    if effective is not None:
        tests = {"effective_f": effective, **tests}
    sets = _sets(options, parts, second, robust, effective)
    boot = wild_instruments.bootstrap(parts, options, weights)
    if boot is not None:
        tests["wild_bootstrap"] = boot.test
        if boot.set is not None:
            sets["wild_bootstrap"] = boot.set
    unbounded = robust.shape in (Shape.RAYS, Shape.LINE)
    weak = unbounded or effective is None or effective.statistic < strength.STRONG
    left_out = without_each(design, options, fit) if options.draws else {}
    return replace(
        _estimate(design, options, parts, second),
        fit={**_facts(design, parts, forms, second), **left_out},
        tests=tests,
        stages=_stages(design, options, parts),
        robust_set=robust if weak else None,
        sets=sets,
        notes=(
            *parts.sample.notes,
            *cautions(parts.sample.rule, second.errors.floored or forms.repaired),
            *(_notes_of_several(parts) if effective is None else _notes(effective)),
            *_notes_of_set(robust),
        ),
    )


def _effective(parts: Parts, forms: ReducedForms) -> TestResult:
    L = len(parts.instruments)
    return strength.effective_f(parts.D, parts.Z, forms.treatment, forms.covariance[L:, L:])


def _estimate(design: Design, options: FitOptions, parts: Parts, second: Second) -> Estimate:
    sample = parts.sample
    return Estimate(
        estimator="two_stage_least_squares",
        title="Two-stage least squares",
        estimand=_estimand(design),
        claim="has, under exclusion, an estimated effect of",
        names=sample.names,
        coefficients=second.coefficients,
        covariance=second.covariance,
        df=second.df,
        df_rule=second.df_rule,
        covariance_name=words(sample.rule),
        n=sample.n,
        treatment=design.treatment,
        outcome=design.outcome,
        clusters=sample.rule.counts,
        effects=sample.levels,
        scores=second.errors.influence,
        citation=CITATION,
        level=options.level,
    )


def _second_stage(parts: Parts) -> Second:
    sample, places = parts.sample, list(parts.places)
    predicted = sample.X.copy()
    predicted[:, places] -= solve(parts.Z, parts.E)[1]
    b, _, bread = solve(predicted, sample.y)
    u = sample.y - sample.X @ b
    if float(u @ u) <= EXACT * sample.total:
        raise EstimationFailed("the regressors fit the outcome exactly: no error is left")
    k = len(b)
    errors = sandwich(sample.rule, predicted, bread, u[:, None], k + sample.counted)
    df, sentence = degrees_of_freedom(sample.rule, k + sample.absorbed)
    return Second(b, u, errors, positive(errors.covariance, sample.names), df, sentence)


def _estimand(design: Design) -> str:
    names = " and ".join(design.instruments)
    if len(design.endogenous) > 1:
        others = " and ".join(design.endogenous[1:])
        return (
            f"effect of {design.treatment} on {design.outcome}, {others} held fixed, if {names} "
            f"reach the outcome through {design.treatment} and {others} alone and the effects "
            "do not differ between deals"
        )
    return (
        f"average effect of {design.treatment} on {design.outcome} among deals whose "
        f"{design.treatment} is moved by {names} (compliers), if the instruments reach the outcome "
        f"through {design.treatment} alone and move it in one direction only"
    )


def _stages(design: Design, options: FitOptions, parts: Parts) -> tuple[Estimate, ...]:
    """The first stages and the reduced form; several carry their own F, plain and conditional."""
    reduced = first_stages.stage(design, options, parts, of_treatment=False)
    shea = first_stages.shea_r_squared(parts)
    several = len(parts.endogenous) > 1
    found = []
    for at in range(len(parts.endogenous)):
        one = first_stages.stage(design, options, parts, of_treatment=True, which=at)
        tests = {
            "conditional_f": first_stages.conditional_f(parts, at),
            "robust_f": first_stages.individual_f(parts, at),
        }
        facts = {**one.fit, "shea_r_squared": float(shea[at])}
        found.append(replace(one, fit=facts, tests=tests) if several else one)
    return (*found, reduced)


def _sets(
    options: FitOptions,
    parts: Parts,
    second: Second,
    robust: ConfidenceSet,
    effective: TestResult | None,
) -> dict[str, ConfidenceSet]:
    estimate = float(second.coefficients[parts.at])
    error = float(np.sqrt(second.covariance[parts.at, parts.at]))
    reach = t_reach(options.level, second.df)
    sets = {
        "wald": ConfidenceSet(
            Shape.INTERVAL,
            estimate - reach * error,
            estimate + reach * error,
            options.level,
            second.df_rule,
        ),
        "anderson_rubin": robust,
    }
    if effective is not None and len(parts.instruments) == 1 and options.level == 0.95:
        sets["tf"] = strength.size_corrected_set(estimate, error, effective.statistic, reach)
    return sets


def _tests(
    parts: Parts, forms: ReducedForms, tested: ReducedForms, second: Second
) -> dict[str, Tested]:
    shared = {
        "underidentification": first_stages.underidentification(parts),
        "anderson_rubin": anderson_rubin_test(tested),
        "wu_hausman": wu_hausman(parts),
        "overidentification": overidentification(parts, second),
    }
    if len(parts.endogenous) > 1:
        return {"rank_f": first_stages.rank_f(parts), **shared}
    L = len(parts.instruments)
    robust = wald(
        "First-stage F",
        "the instruments do not move the treatment",
        forms.treatment,
        forms.covariance[L:, L:],
        forms.df,
        first_stages.KLEIBERGEN_PAAP,
    )
    return {"robust_f": robust, "homoskedastic_f": homoskedastic_f(parts), **shared}


def _facts(design: Design, parts: Parts, forms: ReducedForms, second: Second) -> dict[str, float]:
    sample, k = parts.sample, len(second.coefficients)
    plain = float(solve(parts.E, parts.y)[0][0])
    left = solve(parts.Z, parts.D)[1]
    free = sample.n - k - sample.absorbed
    u = second.residuals
    facts = {
        "least_squares": plain,
        "ratio": float(second.coefficients[parts.at]) / plain,
        "partial_r_squared": 1 - float(left @ left) / float(parts.D @ parts.D),
        "sigma": float(np.sqrt(u @ u / free)),
        **first_stages.multiplier(sample, k + sample.counted),
    }
    if len(parts.endogenous) > 1:
        facts["shea_r_squared"] = float(first_stages.shea_r_squared(parts)[0])
        facts["cragg_donald_f"] = cragg_donald(parts)
    if sample.levels:
        facts["singletons"] = float(sample.outside)
        facts["absorbed"] = float(sample.absorbed)
        facts["counted"] = float(sample.counted)
    if len(parts.instruments) > len(parts.endogenous):
        facts.update(other_weights(parts))
    return {**facts, **_facts_of_one(design, parts, forms)}


def _facts_of_one(design: Design, parts: Parts, forms: ReducedForms) -> dict[str, float]:
    """What only a single instrument allows to say."""
    if len(parts.instruments) > 1:
        return {}
    F = float(forms.treatment[0] ** 2 / forms.covariance[1, 1])
    facts = {"tf_critical_value": strength.size_corrected_critical(F)}
    treatment = design.X[:, design.names.index(design.treatment)]
    if _binary(design.Z[:, 0]) and _binary(treatment):
        facts["complier_share"] = abs(float(forms.treatment[0]))
    return facts


def _binary(column: Floats) -> bool:
    return set(np.unique(column).tolist()) == {0.0, 1.0}


def _notes(effective: TestResult) -> list[str]:
    F = effective.statistic
    if effective.facts["critical_10"] > F:
        return [
            f"The instruments are weak: effective F {F:.1f}, below the "
            f"{effective.facts['critical_10']:.1f} that keeps the bias under a tenth of its worst "
            "case. Read the Anderson-Rubin set, not the point."
        ]
    if F < strength.STRONG:
        return [
            f"Effective F {F:.1f}, below {strength.STRONG}: the interval shown is the "
            "Anderson-Rubin set, since the usual one would cover less often than it says."
        ]
    return []


def _notes_of_several(parts: Parts) -> list[str]:
    """No threshold of strength is known for several endogenous variables and any errors."""
    listed = " and ".join(parts.endogenous)
    notes = [
        f"{listed} are all instrumented: the interval shown is the Anderson-Rubin set, projected "
        "on the feature, which holds however weak the instruments and covers at least as often as "
        "it says."
    ]
    for at, name in enumerate(parts.endogenous):
        found = first_stages.conditional_f(parts, at)
        if isinstance(found, NotApplicable) or found.statistic >= WEAK_CONDITIONAL:
            continue
        notes.append(
            f"The instruments hardly tell {name} from the other variables: conditional F "
            f"{found.statistic:.1f}, below ten. Read the Anderson-Rubin set, not the point."
        )
    return notes


def _notes_of_set(robust: ConfidenceSet) -> list[str]:
    if robust.shape in (Shape.RAYS, Shape.LINE):
        return ["The data do not bound the effect: the Anderson-Rubin set is unbounded."]
    if robust.shape is Shape.EMPTY:
        return [
            "The Anderson-Rubin set is empty: no coefficient agrees with all instruments, so at "
            "least one of them acts by another way or the effects differ between deals."
        ]
    return []
