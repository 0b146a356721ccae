"""Two-stage least squares for one treatment, with inference that weak instruments survive."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy import linalg

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import (
    ConfidenceSet,
    Estimate,
    EstimationFailed,
    NotApplicable,
    Shape,
    Tested,
    TestResult,
    chi2_test,
    f_test,
    t_reach,
    t_test,
)
from pipeline.core.prices import Floats
from pipeline.estimators import effective_f as strength
from pipeline.estimators.algebra import solve
from pipeline.estimators.anderson_rubin import (
    ReducedForms,
    anderson_rubin_set,
    anderson_rubin_test,
)
from pipeline.estimators.diagnostics import wald
from pipeline.estimators.errors import (
    Sandwich,
    cautions,
    degrees_of_freedom,
    positive,
    sandwich,
    words,
)
from pipeline.estimators.stages import (
    Parts,
    moment_covariance,
    multiplier,
    parts_of,
    reduced_forms,
    stage,
)

CITATION = "Theil (1953); Basmann (1957); Angrist and Imbens (1995)"
STOCK_YOGO_SIZE = {
    1: (16.38, 8.96, 6.66, 5.53),
    2: (19.93, 11.59, 8.75, 7.25),
    3: (22.30, 12.83, 9.54, 7.80),
}
"""Instruments -> first-stage F for a largest 5% test size of 10, 15, 20, 25%: Stock and Yogo
(2005), table 5.2."""
EXACT = 1e-20


@dataclass(frozen=True, slots=True, eq=False)
class Second:
    """Second stage: coefficients (k,), residuals (n,) of the structural equation, covariance."""

    coefficients: Floats
    residuals: Floats
    errors: Sandwich
    covariance: Floats
    df: float
    df_rule: str


def two_stage_least_squares(design: Design, options: FitOptions) -> Estimate:
    """Least squares of the outcome on the controls and on the treatment the instruments predict.

    X (n, k) and Z (n, L), L ≥ 1; fixed effects, if the design has any, are first taken out of
    every column. Errors are clustered if the design has clusters and no other covariance is
    asked for, with t(min G - 1); HC1 with t(n - k) otherwise. ``robust_set`` is the
    Anderson-Rubin set while the effective F is below 104.67.

    ``sets``: wald, anderson_rubin, tf (one instrument, level .95). ``tests``: effective_f,
    robust_f, homoskedastic_f, anderson_rubin (at 0), wu_hausman, overidentification.
    ``stages``: the first stage and the reduced form. ``fit``: least_squares, ratio (to it),
    partial_r_squared, sigma, small_sample_factor; singletons, absorbed, counted (effects); liml,
    liml_kappa, fuller, alone.<instrument> (several instruments); tf_critical_value (one);
    complier_share (treatment and single instrument 0 or 1).

    Raises:
        InputProblem: see :func:`~pipeline.estimators.stages.parts_of`.
        EstimationFailed: if the effects cannot be absorbed, the fit is exact or a variance is
            not positive.
    """
    parts = parts_of(design, options)
    return with_weak_instrument_checks(design, options, parts, _second_stage(parts))


def with_weak_instrument_checks(
    design: Design, options: FitOptions, parts: Parts, second: Second
) -> Estimate:
    """A column around a second stage, however it weighs the instruments.

    Everything beside the second stage's own coefficients and errors is as in
    :func:`two_stage_least_squares`, whose names and citation it carries too.
    """
    forms = reduced_forms(parts)
    L = len(parts.instruments)
    effective = strength.effective_f(parts.D, parts.Z, forms.treatment, forms.covariance[L:, L:])
    sets = _sets(options, parts, forms, second, effective.statistic)
    weak = effective.statistic < strength.STRONG
    return replace(
        _estimate(design, options, parts, second),
        fit=_facts(design, parts, forms, second),
        tests={"effective_f": effective, **_tests(parts, forms, second)},
        stages=tuple(stage(design, options, parts, of_treatment=of) for of in (True, False)),
        robust_set=sets["anderson_rubin"] if weak else None,
        sets=sets,
        notes=(
            *parts.sample.notes,
            *cautions(parts.sample.rule, second.errors.floored or forms.repaired),
            *_notes(effective, sets["anderson_rubin"]),
        ),
    )


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
    sample = parts.sample
    predicted = sample.X.copy()
    predicted[:, parts.at] -= solve(parts.Z, parts.D)[1]
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
    return (
        f"average effect of {design.treatment} on {design.outcome} among deals whose "
        f"{design.treatment} is moved by {names} (compliers), if the instruments reach the outcome "
        f"through {design.treatment} alone and move it in one direction only"
    )


def _sets(
    options: FitOptions, parts: Parts, forms: ReducedForms, second: Second, F: float
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
        "anderson_rubin": anderson_rubin_set(forms, options.level),
    }
    if len(parts.instruments) == 1 and options.level == 0.95:
        sets["tf"] = strength.size_corrected_set(estimate, error, F, reach)
    return sets


def _tests(parts: Parts, forms: ReducedForms, second: Second) -> dict[str, Tested]:
    L = len(parts.instruments)
    return {
        "robust_f": wald(
            "First-stage F",
            "the instruments do not move the treatment",
            forms.treatment,
            forms.covariance[L:, L:],
            forms.df,
            "Kleibergen and Paap (2006)",
        ),
        "homoskedastic_f": _homoskedastic_f(parts),
        "anderson_rubin": anderson_rubin_test(forms),
        "wu_hausman": _wu_hausman(parts),
        "overidentification": overidentification(parts, second),
    }


def _homoskedastic_f(parts: Parts) -> TestResult:
    """Cragg and Donald (1993) F, with the critical values that hold under equal variances."""
    L, sample = len(parts.instruments), parts.sample
    left = solve(parts.Z, parts.D)[1]
    free = sample.n - parts.k_first - sample.absorbed
    noise = float(left @ left)
    statistic = (float(parts.D @ parts.D) - noise) / L / (noise / free)
    sizes = dict(zip((10, 15, 20, 25), STOCK_YOGO_SIZE.get(L, ()), strict=False))
    return f_test(
        "First-stage F, equal variances",
        "the instruments do not move the treatment",
        statistic,
        L,
        free,
        caution="holds under equal variances and independent deals only; kept for comparison",
        citation="Cragg and Donald (1993); Stock and Yogo (2005)",
        facts={f"stock_yogo_size_{size}": value for size, value in sizes.items()},
    )


def _wu_hausman(parts: Parts) -> TestResult:
    """t of the first-stage residual added to least squares, with the fit's own covariance."""
    sample = parts.sample
    noise = solve(parts.spread, sample.X[:, parts.at])[1]
    wide = np.column_stack([sample.X, noise])
    b, e, bread = solve(wide, sample.y)
    k = len(b)
    errors = sandwich(sample.rule, wide, bread, e[:, None], k + sample.counted)
    df, _ = degrees_of_freedom(sample.rule, k + sample.absorbed)
    return t_test(
        "Wu-Hausman",
        "least squares and two stages estimate the same coefficient",
        float(b[-1] / np.sqrt(errors.covariance[-1, -1])),
        df,
        caution="has little power when the instruments are weak",
        citation="Wu (1973); Hausman (1978); Wooldridge (2010), sec. 6.3.1",
    )


def overidentification(parts: Parts, second: Second) -> Tested:
    """Hansen's J at the two-step efficient estimate; Sargan's nR² with classical errors.

    The weights are those of ``second``'s residuals (Hansen 1982; Sargan 1958).
    The controls' moments are met exactly, so the instruments' own suffice, controls taken out.
    """
    L, rule = len(parts.instruments), parts.sample.rule
    name = "Sargan" if rule.kind == "classical" else "Hansen J"
    if L == 1:
        return NotApplicable(name, "as many instruments as treatments: nothing is left to test")
    if rule.kind == "classical":
        u = second.residuals
        S = parts.Z.T @ parts.Z * float(u @ u) / len(u)
        v = u
    else:
        S = moment_covariance(parts, second.residuals)
        scale = np.sqrt(np.abs(np.diag(S)))
        if np.linalg.eigvalsh(S / np.outer(scale, scale))[0] < 1e-12:
            return NotApplicable(name, "too few clusters for the covariance of the moments")
        d, y = parts.Z.T @ parts.D, parts.Z.T @ parts.y
        weighted = np.linalg.solve(S, d)
        v = parts.y - parts.D * float(weighted @ y) / float(weighted @ d)
    g = parts.Z.T @ v
    return chi2_test(
        name,
        "the instruments agree on one coefficient",
        float(g @ np.linalg.solve(S, g)),
        L - 1,
        caution="a flaw that all instruments share goes unseen, and treatment effects that differ "
        "between deals can reject too",
        citation="Sargan (1958)" if rule.kind == "classical" else "Hansen (1982)",
    )


def _facts(design: Design, parts: Parts, forms: ReducedForms, second: Second) -> dict[str, float]:
    sample, k = parts.sample, len(second.coefficients)
    plain = float(parts.D @ parts.y) / float(parts.D @ parts.D)
    left = solve(parts.Z, parts.D)[1]
    free = sample.n - k - sample.absorbed
    u = second.residuals
    facts = {
        "least_squares": plain,
        "ratio": float(second.coefficients[parts.at]) / plain,
        "partial_r_squared": 1 - float(left @ left) / float(parts.D @ parts.D),
        "sigma": float(np.sqrt(u @ u / free)),
        **multiplier(sample, k + sample.counted),
    }
    if sample.levels:
        facts["singletons"] = float(sample.outside)
        facts["absorbed"] = float(sample.absorbed)
        facts["counted"] = float(sample.counted)
    if len(parts.instruments) > 1:
        facts.update(_other_weights(parts))
    else:
        F = float(forms.treatment[0] ** 2 / forms.covariance[1, 1])
        facts["tf_critical_value"] = strength.size_corrected_critical(F)
        treatment = design.X[:, design.names.index(design.treatment)]
        if _binary(design.Z[:, 0]) and _binary(treatment):
            facts["complier_share"] = abs(float(forms.treatment[0]))
    return facts


def _binary(column: Floats) -> bool:
    return set(np.unique(column).tolist()) == {0.0, 1.0}


def smallest_root(parts: Parts) -> float:
    """κ, the smallest root of |Y'Y - κ Y'M_Z Y| = 0, Y = [y, D]; at least one.

    Anderson and Rubin (1949); Fuller (1977).
    """
    Y = np.column_stack([parts.y, parts.D])
    rest = solve(parts.Z, Y)[1]
    return float(linalg.eigh(Y.T @ Y, rest.T @ rest, eigvals_only=True)[0])


def _other_weights(parts: Parts) -> dict[str, float]:
    """Limited-information maximum likelihood, Fuller's (a = 1), and each instrument alone.

    Far from two-stage least squares, they point to weak instruments.
    """
    Y = np.column_stack([parts.y, parts.D])
    rest = solve(parts.Z, Y)[1]
    kappa = smallest_root(parts)
    free = parts.sample.n - parts.k_first - parts.sample.absorbed

    def k_class(weight: float) -> float:
        moments = Y.T @ Y - weight * (rest.T @ rest)
        return float(moments[1, 0] / moments[1, 1])

    return {
        "liml": k_class(kappa),
        "liml_kappa": kappa,
        "fuller": k_class(kappa - 1 / free),
        **{
            f"alone.{name}": float(z @ parts.y) / float(z @ parts.D)
            for name, z in zip(parts.instruments, parts.Z.T, strict=True)
        },
    }


def _notes(effective: TestResult, robust: ConfidenceSet) -> list[str]:
    notes = []
    F = effective.statistic
    if effective.facts["critical_10"] > F:
        notes.append(
            f"The instruments are weak: effective F {F:.1f}, below the "
            f"{effective.facts['critical_10']:.1f} that keeps the bias under a tenth of its worst "
            "case. Read the Anderson-Rubin set, not the point."
        )
    elif F < strength.STRONG:
        notes.append(
            f"Effective F {F:.1f}, below {strength.STRONG}: the interval shown is the "
            "Anderson-Rubin set, since the usual one would cover less often than it says."
        )
    if robust.shape in (Shape.RAYS, Shape.LINE):
        notes.append("The data do not bound the effect: the Anderson-Rubin set is unbounded.")
    if robust.shape is Shape.EMPTY:
        notes.append(
            "The Anderson-Rubin set is empty: no coefficient agrees with all instruments, so at "
            "least one of them acts by another way or the effects differ between deals."
        )
    return notes
