"""News that was half known, and deals that may not close: the effect behind the announcement.

If investors gave a deal of value V, to be completed with probability c, a chance p before it was
announced, the announcement moved the price by c(1 - p)V, not by V (Malatesta and Thompson 1985).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from pipeline.core.design import Design
from pipeline.core.estimate import Estimate, t_reach
from pipeline.core.prices import Booleans
from pipeline.estimators.algebra import refusal
from pipeline.estimators.errors import CLUSTER, ErrorRule, of_influence

CITATION = "Malatesta and Thompson (1985)"


@dataclass(frozen=True, slots=True)
class Expected:
    """What investors thought: ``treated`` and ``untreated`` are the chances given to a deal of
    either kind before its announcement, ``completion`` the chance that an announced one closes."""

    treated: float
    untreated: float
    completion: float = 1.0


def unanticipated(
    column: Estimate, design: Design, kept: Booleans, expected: Expected, level: float
) -> tuple[float, float, float]:
    """Difference in full value between treated and untreated deals, and its interval.

    With m₁ and m₀ the mean outcomes of either kind at average controls, m₁ - m₀ the column's
    effect, it is m₁/(c(1 - p₁)) - m₀/(c(1 - p₀)): unequal anticipation makes an effect of a mean
    reaction. Its error joins those of the mean and of the effect, from ``column.scores`` over the
    rows ``kept`` (n,). Probabilities are taken as known.

    Raises:
        InputProblem: ``probability_range``.
        ValueError: if the column has no scores for these rows.
    """
    _check(expected)
    if column.scores is None or len(column.scores) != kept.sum():
        raise ValueError(f"{column.estimator} has no score for each deal")
    at = column.names.index(column.treatment)
    y = design.y[kept]
    D = design.X[kept, design.names.index(design.treatment)]
    share, mean = float(D.mean()), float(y.mean())
    one = 1 / (expected.completion * (1 - expected.treated))
    none = 1 / (expected.completion * (1 - expected.untreated))
    on_mean, on_effect = one - none, (1 - share) * one + share * none
    effect = float(column.coefficients[at])
    value = on_mean * mean + on_effect * effect
    psi = on_mean * (y - mean) / len(y) + on_effect * column.scores[:, at]
    alone = of_influence(_rule(column, design, kept), column.scores[:, [at]], 1).covariance
    both = of_influence(_rule(column, design, kept), psi[:, None], 1).covariance
    # The column's own small-sample rule, carried over by what it makes of the effect alone.
    scale = float(column.covariance[at, at] / alone[0, 0])
    half = t_reach(level, column.df) * float(np.sqrt(both[0, 0] * scale))
    return value, value - half, value + half


def _check(expected: Expected) -> None:
    chances = (expected.treated, expected.untreated)
    if not all(0 <= p < 1 for p in chances) or not 0 < expected.completion <= 1:
        raise refusal(
            "probability_range",
            "anticipation",
            f"{chances[0]:g}, {chances[1]:g} and {expected.completion:g}",
            "chances from 0 to below 1, and a completion above 0 and at most 1",
            "give probabilities",
        )


def _rule(column: Estimate, design: Design, kept: Booleans) -> ErrorRule:
    clusters = {name: design.clusters[name][kept] for name in column.clusters}
    return ErrorRule(CLUSTER if clusters else "hc0", clusters, int(kept.sum()))
