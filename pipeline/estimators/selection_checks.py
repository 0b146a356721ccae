"""The reviewers' checklist of a selection model: each answer against its threshold."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import replace

from pipeline.core.design import Design, FitOptions, SelectionRows
from pipeline.core.estimate import Estimate, EstimationFailed, NotApplicable, TestResult
from pipeline.core.selection import SelectionCheck
from pipeline.estimators.selection import (
    CONDITION_DOUBTFUL,
    LAMBDA,
    VIF_DOUBTFUL,
    VIF_HOPELESS,
    excluded_test,
    heckman_two_step,
)
from pipeline.estimators.selection_bootstrap import CITATION as BOOTSTRAP
from pipeline.estimators.selection_bootstrap import Resampled

NAN = float("nan")
HOUSE = "common practice, no source"
LENNOX = "Lennox, Francis and Wang 2012"
LEUNG = "Leung and Yu 1996"
SIGNIFICANCE = 0.05
WEAK, STRONG = 0.3, 0.7


def checklist(
    design: Design, options: FitOptions, stage: Estimate, drawn: Resampled | None
) -> tuple[SelectionCheck, ...]:
    """Every check of the design's selection model, ``stage`` its probit of announcing."""
    selection = design.selection
    if selection is None:
        return ()
    return (
        *_first_checks(stage, selection),
        *_exclusion_checks(stage, selection),
        *_two_step_checks(design, options),
        *_bootstrap_checks(drawn),
    )


def _read(part: str, check: str, value: float, meaning: str, source: str = "") -> SelectionCheck:
    return SelectionCheck(part, check, value, NAN, "", "reading", meaning, source)


def _first_checks(stage: Estimate, selection: SelectionRows) -> Iterator[SelectionCheck]:
    part, facts = "First stage", stage.fit
    yield _read(part, "Candidates", float(stage.n), "Rows of the selection equation.")
    yield _read(part, "Candidates that announced", float(selection.selected.sum()),
                "Rows of the outcome equation.")  # fmt: skip
    yield _read(part, "Pseudo R²", facts["pseudo_r_squared"],
                "How much better than the bare share of announcers the equation fits.",
                "McFadden 1974")  # fmt: skip
    yield _read(part, "Area under the curve", facts["auc"],
                "Share of pairs, one that announced and one that did not, put in the right order; "
                "a half is chance.", "Hanley and McNeil 1982")  # fmt: skip
    for label in ("smallest", "median", "largest"):
        yield _read(part, f"Probability of announcing, {label}", facts[f"probability_{label}"],
                    "The narrower the range, the straighter the correction.", LENNOX)  # fmt: skip


def _exclusion_checks(stage: Estimate, selection: SelectionRows) -> Iterator[SelectionCheck]:
    part = "Excluded variables"
    if not selection.excluded:
        yield SelectionCheck(
            part, "Variables that move announcing alone", 0.0, NAN, "at least 1", "fail",
            "The correction rests on the curvature of the normal distribution alone.", LENNOX,
        )  # fmt: skip
        return
    test = excluded_test(stage, selection)
    if isinstance(test, NotApplicable):
        yield _read(part, test.name, NAN, test.reason)
    else:
        yield _tested(part, test, "All of them together; without it they identify nothing.")
    for name in selection.excluded:
        term = stage.term(name)
        small = term["p_value"] < SIGNIFICANCE
        yield SelectionCheck(
            part, f"{name} in the first stage, t", term["statistic"], term["p_value"],
            f"p below {SIGNIFICANCE}", "pass" if small else "warn",
            "Alone it should move announcing; that it moves nothing else is argued, not tested.",
            LENNOX,
        )  # fmt: skip


def _tested(part: str, test: TestResult, meaning: str) -> SelectionCheck:
    verdict = "pass" if test.p_value < SIGNIFICANCE else "warn"
    kind = "F" if test.distribution == "F" else "χ²"
    name = f"{test.name}, {kind}"
    return SelectionCheck(
        part, name, test.statistic, test.p_value, f"p below {SIGNIFICANCE}", verdict, meaning,
        test.citation,
    )  # fmt: skip


def _two_step_checks(design: Design, options: FitOptions) -> Iterator[SelectionCheck]:
    try:
        column = heckman_two_step(design, replace(options, covariance="hc1"))
    except EstimationFailed as failure:
        yield _read("Correction", "Two-step estimate", NAN, f"None: {failure.reason}.")
        return
    facts = column.fit
    inflation = facts["lambda_vif"]
    yield from _collinearity(facts, inflation)
    yield from _correlation(column, inflation)


def _collinearity(facts: Mapping[str, float], inflation: float) -> Iterator[SelectionCheck]:
    part = "Collinearity of the correction"
    verdict = "fail" if inflation > VIF_HOPELESS else "warn" if inflation > VIF_DOUBTFUL else "pass"
    share = f"at most {1 - 1 / VIF_DOUBTFUL:.2f}"
    yield SelectionCheck(
        part, "R² of the inverse Mills ratio on the regressors", 1 - 1 / inflation, NAN, share,
        verdict, "Near one, the correction cannot be told apart from the regressors.", LEUNG,
    )  # fmt: skip
    yield SelectionCheck(
        part, "Variance inflation of the inverse Mills ratio", inflation, NAN,
        f"at most {VIF_DOUBTFUL:g}; above {VIF_HOPELESS:g} the column does not lead", verdict,
        "How much larger the correction's variance is for it.", f"{LEUNG}; thresholds {HOUSE}",
    )  # fmt: skip
    condition = facts["condition_number"]
    yield SelectionCheck(
        part, "Condition number with the ratio", condition, NAN,
        f"at most {CONDITION_DOUBTFUL:g}", "warn" if condition > CONDITION_DOUBTFUL else "pass",
        "Above it two-step estimates tend to be unstable.", LEUNG,
    )  # fmt: skip
    yield _read(part, "Condition number without the ratio",
                facts["condition_number_without_lambda"],
                "What of it is not the ratio's doing.", LEUNG)  # fmt: skip


def _correlation(column: Estimate, inflation: float) -> Iterator[SelectionCheck]:
    part, rho = "Correlation of the errors", column.fit["rho"]
    p = column.term(LAMBDA)["p_value"]
    outside = abs(rho) > 1
    yield SelectionCheck(
        part, "Implied by the two steps", rho, p, "between −1 and 1",
        "warn" if outside else "reading", correlation_words(rho, p, inflation), "Heckman 1979",
    )  # fmt: skip
    yield _read(part, "Coefficient of the inverse Mills ratio over σ, t",
                column.term(LAMBDA)["statistic"],
                "A large p is no proof that there is no selection.", LENNOX)  # fmt: skip


def correlation_words(rho: float, p: float, inflation: float) -> str:
    """Sign and size of the correlation read for a person; p is that of the correction.

    Below .3 it is called weak, above .7 strong: common practice, no source.
    """
    if abs(rho) > 1:
        return "Outside its range: the model and the data disagree."
    size = "weak" if abs(rho) < WEAK else "strong" if abs(rho) > STRONG else "moderate"
    way = "higher" if rho > 0 else "lower"
    words = (
        f"A {size} correlation: companies that announced against the odds have {way} returns "
        "than their figures suggest."
    )
    if p < SIGNIFICANCE:
        return words
    words += " It cannot be told from none here, which is no proof that there is no selection"
    if inflation > VIF_DOUBTFUL:
        words += ": the correction is nearly a combination of the regressors"
    return f"{words}."


def _bootstrap_checks(drawn: Resampled | None) -> Iterator[SelectionCheck]:
    if drawn is None:
        return
    part = "Replications of both steps"
    by = f"clusters by {drawn.clusters}" if drawn.clusters else "single candidates"
    yield _read(part, "Drawn", float(drawn.asked), f"Whole {by} with replacement.", BOOTSTRAP)
    share = drawn.failed / drawn.asked
    yield SelectionCheck(
        part, "Left out, their probit without a maximum", float(drawn.failed), NAN,
        "at most a twentieth", "pass" if share <= SIGNIFICANCE else "warn",
        "Many of them say that a few rows decide the first stage.", HOUSE,
    )  # fmt: skip
