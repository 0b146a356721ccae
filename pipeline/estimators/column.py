"""One column of the table for an estimator whose distribution is known in large samples."""

from __future__ import annotations

from dataclasses import dataclass

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import Estimate
from pipeline.core.prices import Floats
from pipeline.estimators.errors import ErrorRule, positive
from pipeline.estimators.probit import limits


@dataclass(frozen=True, slots=True)
class Labels:
    """How a column is called and what it means: key, title, estimand, covariance, source."""

    estimator: str
    title: str
    estimand: str
    covariance: str
    citation: str
    claim: str = "is associated with"


@dataclass(frozen=True, slots=True, eq=False)
class Found:
    """Names (k), coefficients (k,) and their covariance (k, k)."""

    names: tuple[str, ...]
    coefficients: Floats
    covariance: Floats


def large_sample(
    design: Design, options: FitOptions, rule: ErrorRule, labels: Labels, found: Found
) -> Estimate:
    """The :class:`Estimate`, read against the normal, t(G - 1) with clusters.

    Raises:
        EstimationFailed: if a variance is not positive.
    """
    df, sentence = limits(rule)
    return Estimate(
        estimator=labels.estimator,
        title=labels.title,
        estimand=labels.estimand,
        claim=labels.claim,
        names=found.names,
        coefficients=found.coefficients,
        covariance=positive(found.covariance, found.names),
        df=df,
        df_rule=sentence,
        covariance_name=labels.covariance,
        n=design.n,
        treatment=design.treatment,
        outcome=design.outcome,
        clusters=rule.counts,
        citation=labels.citation,
        level=options.level,
    )
