"""The least-squares regression under scrutiny: outcome, treatment, controls and their errors."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from pipeline.core.design import Design, FitOptions
from pipeline.core.prices import Floats
from pipeline.estimators.algebra import partial_out, refuse_dependent, solve
from pipeline.estimators.errors import ErrorRule, choose_errors, degrees_of_freedom, sandwich
from pipeline.estimators.sample import Sample, plain, within


@dataclass(frozen=True, slots=True, eq=False)
class Ground:
    """A least-squares regression, fixed effects taken out of every column if it has any.

    Attributes:
        sample: rows, columns and the treatment of the errors.
        at: the treatment's column in ``sample.X``.
        y, D: (n,) outcome and treatment; the constant or the effects are not taken out of y.
        W: (n, k - 1) the other regressors; names: theirs.
        estimate: coefficient of the treatment, outcome unit per unit of the treatment.
        classical: its standard error under equal variances, the one the identities hold for.
        robust: its standard error under the sample's rule, the one inference uses.
        df: n less all coefficients, effects included; robust_df: of the robust t.
    """

    sample: Sample
    at: int
    y: Floats
    D: Floats
    W: Floats
    names: tuple[str, ...]
    estimate: float
    classical: float
    robust: float
    df: int
    robust_df: float

    @property
    def n(self) -> int:
        """Rows."""
        return len(self.y)


def ground_of(design: Design, options: FitOptions, *, effects: bool = False) -> Ground:
    """The least-squares regression of the design; within its fixed effects if ``effects``.

    Errors are clustered if the design has clusters and nothing else is asked for, HC1 otherwise;
    see :func:`summed`.

    Raises:
        InputProblem: as :func:`~pipeline.estimators.least_squares.ols` and ``fixed_effects``.
    """
    if effects:
        sample = within(design, summed(options))
    else:
        rule = choose_errors(
            design.clusters, design.n, summed(options), otherwise="hc1", cluster_by_default=True
        )
        sample = plain(design, rule)
    refuse_dependent(sample.X, sample.names)
    at = sample.names.index(design.treatment)
    b, e, bread = solve(sample.X, sample.y)
    k = len(b)
    df = sample.n - k - sample.absorbed
    errors = sandwich(sample.rule, sample.X, bread, e[:, None], k + sample.counted)
    return Ground(
        sample=sample,
        at=at,
        y=sample.y,
        D=sample.X[:, at],
        W=np.delete(sample.X, at, axis=1),
        names=tuple(name for column, name in enumerate(sample.names) if column != at),
        estimate=float(b[at]),
        classical=float(np.sqrt(e @ e / df * bread[at, at])),
        robust=float(np.sqrt(errors.covariance[at, at])),
        df=df,
        robust_df=degrees_of_freedom(sample.rule, k + sample.absorbed)[0],
    )


def summed(options: FitOptions) -> FitOptions:
    """The options with errors that are sums over rows or clusters, which all of scrutiny can use.

    HC2 and HC3 become HC1; the small-sample cluster covariances CR2 and CR3 become CR1.
    """
    if options.covariance in ("hc2", "hc3"):
        return replace(options, covariance="hc1")
    if options.covariance in ("cr2", "cr3"):
        return replace(options, covariance="auto", cluster=True)
    return options


def row_sums(rule: ErrorRule) -> ErrorRule:
    """The rule, HC1 in the place of equal variances, which no sum of rows gives."""
    return replace(rule, kind="hc1") if rule.kind == "classical" else rule


def varying(ground: Ground) -> tuple[str, ...]:
    """The controls that vary, that is all but the constant."""
    return tuple(
        name for name, column in zip(ground.names, ground.W.T, strict=True) if np.ptp(column) > 0
    )


def partial_r_squared(target: Floats, of: Floats, others: Floats) -> float:
    """Share of what ``others`` (n, m) leave of ``target`` (n,) that ``of`` (n,) explains."""
    left = partial_out(np.column_stack([target, of]), others)
    a, b = left[:, 0], left[:, 1]
    return float((a @ b) ** 2 / ((a @ a) * (b @ b)))
