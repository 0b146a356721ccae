"""What a reader should check before believing a column, each against a stated threshold.

An estimator records facts and tests; this reads off those that have a threshold.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

from pipeline.core.estimate import Diagnostic, Estimate, NotApplicable, TestResult
from pipeline.estimators.balance import BALANCED

HOUSE = "common practice, no source"
FEW_CLUSTERS = 40
SIGNIFICANCE = 0.05
AFTER = "after."
UNLIKE = 0.25


@dataclass(frozen=True, slots=True)
class Limit:
    """A fact of the fit with the value above which it warns, and above which it fails."""

    fact: str
    words: str
    warn: float
    fail: float
    meaning: str
    source: str


LIMITS = (
    Limit(
        "condition_number",
        "Condition number of the regressors",
        30.0,
        float("inf"),
        "Too high, it leaves the coefficients hard to tell apart.",
        "Belsley, Kuh and Welsch 1980",
    ),
    Limit(
        "vif_treatment",
        "Variance inflation of the feature",
        10.0,
        float("inf"),
        "Too high, the controls nearly determine the feature.",
        HOUSE,
    ),
    Limit(
        "lambda_vif",
        "Variance inflation of the selection term",
        10.0,
        30.0,
        "Too high, the correction rests on the shape of the normal curve.",
        "Leung and Yu 1996, thresholds common practice",
    ),
    Limit(
        "curvature_alone",
        "Selection model without a variable that moves announcing alone",
        0.5,
        0.5,
        "It rests on the shape of the normal curve alone and does not lead.",
        "Lennox, Francis and Wang 2012",
    ),
    Limit(
        "propensity_extreme",
        "Deals all but sure of the feature, or of its absence, share",
        0.05,
        0.2,
        "For them there is hardly a deal to compare with, and the column extrapolates.",
        f"Crump, Hotz, Imbens and Mitnik 2009; thresholds {HOUSE}",
    ),
    Limit(
        "clipped",
        "Deals whose probability of the feature had to be moved, share",
        0.05,
        0.2,
        "For them the other side is all but missing, and the column rests on its bounds.",
        HOUSE,
    ),
    Limit(
        "ratio",
        "Instrumented over least-squares estimate, size",
        5.0,
        float("inf"),
        "Too high, the instruments may move more than the feature.",
        "Lal, Lockhart, Xu and Zu 2024",
    ),
)


@dataclass(frozen=True, slots=True)
class Wanted:
    """A test whose verdict hangs on its p-value: small wanted, or large."""

    test: str
    words: str
    small: bool
    meaning: str


TESTS = (
    Wanted(
        "breusch_pagan",
        "Equal variances, p",
        False,
        "Unequal variances leave only robust or clustered errors; these are used.",
    ),
    Wanted(
        "reset",
        "Straight-line form, p",
        False,
        "A low p hints at a curve that a straight line misses.",
    ),
    Wanted(
        "excluded_variables",
        "Excluded variables move the decision, p",
        True,
        "Without it nothing but the shape of the normal curve identifies the correction.",
    ),
    Wanted(
        "overidentification",
        "Instruments agree with one another, p",
        False,
        "A low p says that one of them does not move the feature alone; a common flaw goes unseen.",
    ),
)


def with_checks(estimate: Estimate) -> Estimate:
    """The estimate with its diagnostics."""
    found = (
        *_limits(estimate),
        *_balance(estimate),
        *_tests(estimate),
        *_strength(estimate),
        *_clusters(estimate),
    )
    return replace(estimate, checks=found)


def _limits(estimate: Estimate) -> Iterator[Diagnostic]:
    for limit in LIMITS:
        value = estimate.fit.get(limit.fact)
        if value is None:
            continue
        size = abs(value)
        verdict = "fail" if size > limit.fail else "warn" if size > limit.warn else "pass"
        threshold = f"at most {limit.warn:g}"
        yield Diagnostic(
            estimate.title, limit.words, value, threshold, verdict, limit.meaning, limit.source
        )


def _balance(estimate: Estimate) -> Iterator[Diagnostic]:
    """The largest standardised difference of a control that weights or matches leave."""
    left = {
        name.removeprefix(AFTER): abs(value)
        for name, value in estimate.fit.items()
        if name.startswith(AFTER)
    }
    if not left:
        return
    worst = max(left, key=lambda name: left[name])
    size = left[worst]
    yield Diagnostic(
        estimate.title,
        f"Largest difference left between the two sides, in standard deviations ({worst})",
        size,
        f"at most {BALANCED:g}; above {UNLIKE:g} the column does not lead",
        "fail" if size > UNLIKE else "warn" if size > BALANCED else "pass",
        "Too large, unlike deals are compared, and the controls' shape decides the answer.",
        "Austin 2009; Imbens and Wooldridge 2009",
    )


def _tests(estimate: Estimate) -> Iterator[Diagnostic]:
    for wanted in TESTS:
        test = estimate.tests.get(wanted.test)
        if test is None or isinstance(test, NotApplicable):
            continue
        small = test.p_value < SIGNIFICANCE
        threshold = f"{'below' if wanted.small else 'above'} {SIGNIFICANCE}"
        verdict = "pass" if small == wanted.small else "warn"
        yield Diagnostic(
            estimate.title,
            wanted.words,
            test.p_value,
            threshold,
            verdict,
            wanted.meaning,
            test.citation or HOUSE,
        )


def _strength(estimate: Estimate) -> Iterator[Diagnostic]:
    """Effective F against the value at which bias may reach a tenth of the worst case."""
    test = estimate.tests.get("effective_f")
    if not isinstance(test, TestResult):
        return
    needed = test.facts["critical_10"]
    yield Diagnostic(
        estimate.title,
        "Strength of the instruments, effective F",
        test.statistic,
        f"above {needed:.1f}",
        "pass" if test.statistic > needed else "warn",
        "Too weak, the t interval misleads; read the Anderson–Rubin set.",
        "Montiel Olea and Pflueger 2013",
    )


def _clusters(estimate: Estimate) -> Iterator[Diagnostic]:
    for name, count in estimate.clusters.items():
        yield Diagnostic(
            estimate.title,
            f"Clusters by {name}",
            float(count),
            f"at least {FEW_CLUSTERS}",
            "pass" if count >= FEW_CLUSTERS else "warn",
            "With few clusters the errors are too small.",
            "Cameron and Miller 2015",
        )
