"""Other corrections for who announces: a straight line, and powers of the index."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from pipeline.core.design import Design, SelectionRows
from pipeline.core.estimate import EstimationFailed
from pipeline.core.prices import Floats
from pipeline.estimators.algebra import refuse_dependent, solve
from pipeline.estimators.errors import ErrorRule, of_influence, positive
from pipeline.estimators.probit import ProbitFit

OLSEN, NEWEY = "Olsen (1980)", "Newey (2009)"
EXACT = 1e-10


@dataclass(frozen=True, slots=True, eq=False)
class Control:
    """What stands in the outcome equation for who announced.

    Attributes:
        names: J names.
        C: (n, J) its columns for the selected rows, in the candidates' order.
        slopes: (n, J) their derivatives by the first step's index.
        influence: (A, q) of every candidate on the first step's coefficients.
    """

    names: tuple[str, ...]
    C: Floats
    slopes: Floats
    influence: Floats


def straight_line(selection: SelectionRows) -> Control:
    """p̂ - 1 of a linear probability of announcing (Olsen 1980).

    The selection error is taken to be uniform, so that the correction is linear in w.
    """
    target = selection.selected.astype(np.float64)
    refuse_dependent(selection.W, selection.names)
    a, e, bread = solve(selection.W, target)
    chosen = selection.W[selection.selected]
    fitted = chosen @ a
    return Control(
        ("probability less one",),
        fitted[:, None] - 1,
        np.ones((len(fitted), 1)),
        (selection.W * e[:, None]) @ bread,
    )


def powers(selection: SelectionRows, first: ProbitFit, degree: int) -> Control:
    """The standardised probit index and its powers up to ``degree`` (Newey 2009).

    No shape of the errors' joint distribution is assumed beyond the index; the constant of the
    outcome is then not identified.
    """
    index = first.index[selection.selected]
    spread = float(index.std())
    t = (index - index.mean()) / spread
    exponents = np.arange(1, degree + 1)
    return Control(
        tuple(f"index to the power {at}" for at in exponents),
        t[:, None] ** exponents,
        exponents * t[:, None] ** (exponents - 1) / spread,
        first.influence,
    )


def controlled(
    design: Design, selection: SelectionRows, control: Control, rule: ErrorRule
) -> tuple[tuple[str, ...], Floats, Floats]:
    """Names, coefficients (k + J,) and covariance of least squares on (x, control).

    Errors by the stacked moments of both steps (Newey and McFadden 1994, theorem 6.1).

    Raises:
        InputProblem: ``collinear`` naming the columns.
        EstimationFailed: if the outcome is fitted exactly or a variance is not positive.
    """
    names = (*design.names, *control.names)
    rows = selection.outcome_row[selection.selected]
    X = np.column_stack([design.X[rows], control.C])
    refuse_dependent(X, names)
    b, e, bread = solve(X, design.y[rows])
    if not float(np.mean(e**2)) > EXACT**2 * float(np.var(design.y)):
        raise EstimationFailed("the regressors fit the outcome exactly: no error is left")
    W, k = selection.W[selection.selected], design.X.shape[1]
    derivative = -X.T @ ((control.slopes @ b[k:])[:, None] * W)
    derivative[k:] += (control.slopes * e[:, None]).T @ W
    moments = control.influence @ derivative.T
    moments[selection.selected] += X * e[:, None]
    V = of_influence(rule, np.asarray(moments @ bread), 1).covariance
    return names, b, positive(V, names)
