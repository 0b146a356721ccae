"""Least squares, with the constant or with fixed effects in its place."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import Estimate, EstimationFailed, Tested
from pipeline.core.prices import Floats
from pipeline.estimators import diagnostics, few_clusters
from pipeline.estimators.algebra import leverage, refusal, refuse_dependent, solve
from pipeline.estimators.covariance import CAMERON_GELBACH_MILLER, LONG_ERVIN
from pipeline.estimators.errors import (
    CLUSTER,
    CR2,
    FEW,
    ErrorRule,
    Sandwich,
    cautions,
    choose_errors,
    degrees_of_freedom,
    factor,
    positive,
    sandwich,
    words,
)
from pipeline.estimators.sample import Sample, plain, within

WHITE = "White (1980)"
LIANG_ZEGER = "Liang and Zeger (1986)"
EXACT = 1e-20
SUPPORTED = ("classical", "hc0", "hc1", "hc2", "hc3", *FEW)


@dataclass(frozen=True, slots=True, eq=False)
class Fitted:
    """Coefficients (k,), residuals (n,), bread (k, k), leverage (n,) or None, and the sandwich.

    ``few`` is what CR2 and CR3 add, None for the other covariances.
    """

    coefficients: Floats
    residuals: Floats
    bread: Floats
    hat: Floats | None
    errors: Sandwich
    covariance: Floats
    few: few_clusters.FewClusters | None = None


def ols(design: Design, options: FitOptions) -> Estimate:
    """Least squares of the outcome on the constant, the treatment and the controls.

    X is (n, k); the coefficient of the treatment is in the outcome's unit (decimal) per unit of
    the treatment. HC3 errors unless told otherwise (Long and Ervin 2000), t with n - k degrees
    of freedom; CR1 or two-way clustered errors when the options ask, t with the smaller number
    of clusters less one; CR2 with Satterthwaite's degrees of freedom or CR3 by name, for one
    dimension. ``scores`` (n, k) are the influences (X'X)⁻¹x_i e_i.

    ``fit``: r_squared, adjusted_r_squared, sigma, condition_number, vif_treatment, vif_largest,
    leverage_largest, dfbetas_largest, small_sample_factor (where one number makes the covariance
    from the scores), intraclass_correlation (clustered), df.<name> (CR2). ``tests``:
    joint_controls, breusch_pagan, reset, jarque_bera.

    Raises:
        InputProblem: ``few_rows``, ``collinear``, ``no_variation``, ``fitted_exactly`` (HC2, HC3),
            or a problem of clusters or covariance.
        EstimationFailed: if the regressors fit the outcome exactly.
    """
    rule = choose_errors(design.clusters, design.n, options, otherwise="hc3", supported=SUPPORTED)
    sample = plain(design, rule)
    refuse_dependent(sample.X, sample.names)
    fitted = fit_sample(sample, design)
    column = _estimate(design, options, sample, fitted)
    more = {
        "breusch_pagan": diagnostics.breusch_pagan(sample.X, fitted.residuals),
        "reset": diagnostics.reset(sample.X, sample.y, *_joint(rule, column.df)),
    }
    return replace(
        column,
        estimator="ols",
        title="Least squares",
        estimand=f"{_difference(design)}, holding the controls fixed",
        tests={**column.tests, **more},
    )


def fixed_effects(design: Design, options: FitOptions) -> Estimate:
    """Least squares within the groups of the design's fixed effects.

    The effects are taken out of y (n,) and X (n, k) by demeaning (Frisch and Waugh 1933), exact
    for one effect and by alternating projections for several; rows alone in a group are dropped
    first, and ``n`` counts the rows left. Errors are clustered by the design's one or two cluster
    dimensions: CR1 with effects nested in the clusters not counted, t(min G - 1) (Cameron,
    Gelbach and Miller 2011); HC1 and t(n - k) without clusters, k counting the effects.

    ``fit``: r_squared (effects included), within_r_squared, adjusted_r_squared, sigma,
    condition_number, vif_treatment, vif_largest, singletons, absorbed (coefficients of the
    effects), counted (those in the small-sample factor), small_sample_factor,
    intraclass_correlation. ``tests``: joint_controls, jarque_bera.

    Raises:
        InputProblem: ``no_effects``, ``few_rows``, ``absorbed``, ``no_variation``, ``collinear``,
            or a problem of clusters or covariance.
        EstimationFailed: if the projections do not converge or the fit is exact.
    """
    sample = within(design, options)
    check_rows(sample)
    refuse_dependent(sample.X, sample.names)
    listed = " and ".join(sample.levels)
    return replace(
        _estimate(design, options, sample, fit_sample(sample, design)),
        estimator="fixed_effects",
        title="Fixed effects",
        estimand=f"{_difference(design)} among deals of the same {listed}, "
        "holding the controls fixed",
    )


def _estimate(design: Design, options: FitOptions, sample: Sample, fitted: Fitted) -> Estimate:
    df, sentence = degrees_of_freedom(sample.rule, len(sample.names) + sample.absorbed)
    joint = df
    if fitted.few is not None:
        df = float(fitted.few.df[sample.names.index(design.treatment)])
        sentence = few_clusters.df_sentence(sample.rule, design.treatment, df)
    return Estimate(
        estimator="",
        title="",
        estimand="",
        names=sample.names,
        coefficients=fitted.coefficients,
        covariance=fitted.covariance,
        df=df,
        df_rule=sentence,
        covariance_name=words(sample.rule),
        n=sample.n,
        treatment=design.treatment,
        outcome=design.outcome,
        clusters=sample.rule.counts,
        effects=sample.levels,
        fit=_facts(design, sample, fitted),
        tests={
            "joint_controls": _joint_controls(design, sample, fitted, joint),
            "jarque_bera": diagnostics.jarque_bera(fitted.residuals),
        },
        scores=fitted.errors.influence,
        notes=_notes(design, sample, fitted),
        citation=_citation(sample),
        level=options.level,
        df_each=None if fitted.few is None else fitted.few.df,
    )


def fit_sample(sample: Sample, design: Design) -> Fitted:
    """Coefficients and covariance of a sample whose X (n, k) has full column rank.

    Raises:
        InputProblem: ``fitted_exactly`` if HC2 or HC3 meet a row of leverage one, naming the deal.
        EstimationFailed: if no residual variation is left or a variance is not positive.
    """
    b, e, bread = solve(sample.X, sample.y)
    if float(e @ e) <= EXACT * sample.total:
        raise EstimationFailed("the regressors fit the outcome exactly: no error is left")
    hat = None if sample.hat is None else sample.hat + leverage(sample.X, bread)
    if hat is not None and sample.rule.kind in ("hc2", "hc3") and hat.max() > 1 - 1e-9:
        guilty = np.array(design.rows)[sample.kept][int(hat.argmax())]
        raise refusal(
            "fitted_exactly",
            "",
            f"deal {guilty} alone decides a coefficient",
            "at least two deals behind every coefficient",
            "drop the regressor that marks this deal only, or choose HC1 errors",
        )
    if sample.rule.kind in FEW:
        few = few_clusters.of_sample(sample, design, e)
        influence = np.asarray((sample.X @ bread) * e[:, None])
        covariance = positive(few.covariance, sample.names)
        return Fitted(b, e, bread, hat, Sandwich(covariance, influence), covariance, few)
    errors = sandwich(sample.rule, sample.X, bread, e[:, None], len(b) + sample.counted, hat)
    return Fitted(b, e, bread, hat, errors, positive(errors.covariance, sample.names))


def _joint(rule: ErrorRule, df: float) -> tuple[ErrorRule, float]:
    """The rule and degrees of freedom of tests that add regressors: CR1 in place of CR2 or CR3."""
    if rule.kind not in FEW:
        return rule, df
    plain_clusters = ErrorRule(CLUSTER, rule.clusters, rule.n)
    return plain_clusters, degrees_of_freedom(plain_clusters, 0)[0]


def _difference(design: Design) -> str:
    values = np.unique(design.X[:, design.names.index(design.treatment)])
    binary = len(values) == 2 and set(values.tolist()) == {0.0, 1.0}
    unit = "" if binary else "one more unit of "
    return f"difference in mean {design.outcome} associated with {unit}{design.treatment}"


def check_rows(sample: Sample) -> None:
    """Raise ``few_rows`` unless the sample has more rows than coefficients, effects included."""
    k = len(sample.names) + sample.absorbed
    if sample.n <= k:
        raise refusal(
            "few_rows",
            ", ".join(sample.levels),
            f"{sample.n} deals for {k} coefficients, effects included",
            "more deals than coefficients",
            "use coarser fixed effects",
        )


def _joint_controls(design: Design, sample: Sample, fitted: Fitted, df: float) -> Tested:
    varies = np.ptp(sample.X, axis=0) > 0
    chosen = [at for at, name in enumerate(sample.names) if varies[at] and name != design.treatment]
    return diagnostics.wald(
        "Joint test of the controls",
        "the controls' coefficients are all zero",
        fitted.coefficients[chosen],
        fitted.covariance[np.ix_(chosen, chosen)],
        df,
    )


def _facts(design: Design, sample: Sample, fitted: Fitted) -> dict[str, float]:
    n, k = sample.n, len(sample.names) + sample.absorbed
    squares = float(fitted.residuals @ fitted.residuals)
    inflation = {
        name: diagnostics.variance_inflation(sample.X, column)
        for column, name in enumerate(sample.names)
        if np.ptp(sample.X[:, column]) > 0
    }
    facts = {
        "r_squared": 1 - squares / sample.total,
        "adjusted_r_squared": 1 - squares / sample.total * (n - 1) / (n - k),
        "sigma": float(np.sqrt(squares / (n - k))),
        "condition_number": diagnostics.condition_number(sample.X),
        "vif_treatment": inflation[design.treatment],
        "vif_largest": max(inflation.values()),
        "small_sample_factor": factor(sample.rule, len(sample.names) + sample.counted),
        **(_within_facts(sample, squares) if sample.levels else _row_facts(design, sample, fitted)),
    }
    if len(sample.rule.clusters) == 1:
        (codes,) = sample.rule.clusters.values()
        facts["intraclass_correlation"] = diagnostics.intraclass(fitted.residuals, codes)
    if fitted.few is not None and sample.rule.kind == CR2:
        facts |= {f"df.{n}": float(v) for n, v in zip(sample.names, fitted.few.df, strict=True)}
    return {name: value for name, value in facts.items() if not np.isnan(value)}


def _within_facts(sample: Sample, squares: float) -> dict[str, float]:
    return {
        "within_r_squared": 1 - squares / float(sample.y @ sample.y),
        "singletons": float(sample.outside),
        "absorbed": float(sample.absorbed),
        "counted": float(sample.counted),
    }


def _row_facts(design: Design, sample: Sample, fitted: Fitted) -> dict[str, float]:
    if fitted.hat is None or sample.n <= len(sample.names) + 1:
        return {}
    moves = diagnostics.dfbetas(
        fitted.bread,
        fitted.errors.influence,
        fitted.residuals,
        fitted.hat,
        sample.names.index(design.treatment),
    )
    return {
        "leverage_largest": float(fitted.hat.max()),
        "dfbetas_largest": float(np.nanmax(np.abs(moves))),
    }


def _notes(design: Design, sample: Sample, fitted: Fitted) -> tuple[str, ...]:
    notes = [*sample.notes, *cautions(sample.rule, fitted.errors.floored)]
    if fitted.few is not None:
        at = sample.names.index(design.treatment)
        notes += few_clusters.notes(sample.rule, sample.names, fitted.few, at)
    condition = diagnostics.condition_number(sample.X)
    if condition > diagnostics.CONDITION_LIMIT:
        notes.append(
            f"The regressors are hard to tell apart: condition number {condition:.0f}, above 30."
        )
    free = sample.n - len(sample.names) - sample.absorbed
    if free < 10:
        notes.append(f"Only {free} deals more than coefficients: the fit is close to exact.")
    return tuple(notes)


def _citation(sample: Sample) -> str:
    if sample.rule.kind in FEW:
        cr2 = sample.rule.kind == CR2
        return few_clusters.PUSTEJOVSKY_TIPTON if cr2 else few_clusters.JACKKNIFE
    if sample.rule.kind == CLUSTER:
        return CAMERON_GELBACH_MILLER if len(sample.rule.clusters) > 1 else LIANG_ZEGER
    return LONG_ERVIN if sample.rule.kind == "hc3" else WHITE
