"""The reduced forms of selection with instruments, whose errors count the selection equation."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from pipeline.core.design import SelectionRows
from pipeline.core.prices import Booleans, Floats, Integers
from pipeline.estimators.algebra import orthonormal, partial_out, solve
from pipeline.estimators.anderson_rubin import ReducedForms
from pipeline.estimators.clustered_forms import (
    CR3_POWER,
    degrees_of_freedom,
    one_cluster_decides,
)
from pipeline.estimators.covariance import intersection, recoded
from pipeline.estimators.errors import CLUSTER, ErrorRule, of_influence, positive
from pipeline.estimators.few_clusters import LEAST_DF, LOADED, adjusted
from pipeline.estimators.probit import ProbitFit, limits, row_derivatives
from pipeline.estimators.selection import SecondStep, stacked_influence


@dataclass(frozen=True, slots=True, eq=False)
class Columns:
    """The second step's columns, in the candidates' order of the n deals.

    Attributes:
        y: (n,) outcome.
        X: (n, k + 1) regressors, the inverse Mills ratio last.
        Z: (n, L) instruments.
        spread: (n, L + k) instruments, controls, the ratio last: regressors of the first stage.
        W: (n, q) regressors of the selection equation.
        delta: (n,) λ(λ + w'γ).
        at: the treatment's column in X.
    """

    y: Floats
    X: Floats
    Z: Floats
    spread: Floats
    W: Floats
    delta: Floats
    at: int

    @property
    def targets(self) -> tuple[Floats, Floats]:
        """(n,) outcome and treatment."""
        return self.y, self.X[:, self.at]


def reduced_forms(
    columns: Columns,
    first: ProbitFit,
    selection: SelectionRows,
    rule: ErrorRule,
    names: tuple[str, ...],
) -> ReducedForms:
    """Outcome and treatment on instruments, controls and λ, with the joint stacked covariance."""
    L = columns.Z.shape[1]
    blocks, found = [], []
    for target in columns.targets:
        b, e, bread = solve(columns.spread, target)
        step = SecondStep(columns.spread, columns.W, b, e, bread, columns.delta, 1.0, 0.0)
        blocks.append(stacked_influence(step, first, selection)[:, :L])
        found.append(b[:L])
    errors = of_influence(rule, np.column_stack(blocks), 1)
    df, _ = limits(rule)
    V = positive(errors.covariance, _labels(names))
    return ReducedForms(found[0], found[1], V, _finite(df, rule), errors.floored)


def _labels(names: tuple[str, ...]) -> tuple[str, ...]:
    return tuple(f"{of} {z}" for of in ("outcome on", "first stage") for z in names)


def _finite(df: float, rule: ErrorRule) -> float:
    """The F distribution's denominator: G - 1, or the rows where the normal is meant."""
    return float(rule.n) if np.isinf(df) else df


def inverted_forms(
    columns: Columns,
    first: ProbitFit,
    selection: SelectionRows,
    rule: ErrorRule,
    names: tuple[str, ...],
) -> ReducedForms:
    """What an Anderson-Rubin test is to be given: held to its level with few clusters.

    Without clusters the reduced forms as they are. With them, for orthonormal instruments, the
    scores of either step are those a cluster has when it is left out, as CR3 takes them in least
    squares (Bell and McCaffrey 2002) and one Newton step does in the probit; η are the degrees of
    freedom of Hotelling's T² that fit the deals' clusters (Pustejovsky and Tipton 2018, eq. 15).
    Two dimensions: V₁ + V₂, less V₁₂ for one instrument where the difference is positive; the
    smaller η.

    Raises:
        InputProblem: ``cluster_decides`` if one cluster alone moves a combination of the
            instruments.
    """
    if rule.kind != CLUSTER:
        return reduced_forms(columns, first, selection, rule, names)
    pieces = _pieces(columns, first, selection)
    dimensions = list(rule.clusters.values())
    for name, codes in rule.clusters.items():
        _refuse_loaded(pieces, selection.selected, name, codes, names)
    found = [_of_one(pieces, selection.selected, codes) for codes in dimensions]
    V = np.asarray(sum(one for one, _ in found))
    if len(dimensions) > 1 and len(names) == 1:
        less = V - _of_one(pieces, selection.selected, intersection(*dimensions))[0]
        V = less if np.linalg.eigvalsh(_to_unit(less, V))[0] > 0 else V
    covariance = positive(V, _labels(names))
    df, _ = limits(rule)
    outcome, treatment = pieces.pi.T
    eta = min(eta for _, eta in found)
    return ReducedForms(outcome, treatment, covariance, df, hotelling=eta)


def _to_unit(part: Floats, whole: Floats) -> Floats:
    """``part`` in units in which ``whole`` has ones on its diagonal."""
    size = np.sqrt(np.diag(whole))
    return np.asarray(part / np.outer(size, size))


@dataclass(frozen=True, slots=True, eq=False)
class _Pieces:
    """What the clusters' scores are made of.

    Attributes:
        span: (n, L + k) orthonormal columns for the regressors of the first stage.
        basis: (n, L) orthonormal instruments, controls and λ taken out.
        pi: (L, 2) coefficients of outcome and treatment on them.
        left: (n, 2) residuals.
        through: (2, L, q) how a coefficient moves with the probit's.
        probit_span: (A, q) orthonormal regressors of the probit, weighted.
        probit_loads: (A, q) weight of a candidate's working residual in a probit coefficient.
        working: (A,) the working residuals.
    """

    span: Floats
    basis: Floats
    pi: Floats
    left: Floats
    through: Floats
    probit_span: Floats
    probit_loads: Floats
    working: Floats


def _pieces(columns: Columns, first: ProbitFit, selection: SelectionRows) -> _Pieces:
    L = columns.Z.shape[1]
    Z = partial_out(columns.Z, columns.spread[:, L:])
    basis = orthonormal(Z)
    turn = basis.T @ Z
    weighted = columns.delta[:, None] * columns.W
    pi, left, through = [], [], []
    for target in columns.targets:
        b, e, bread = solve(columns.spread, target)
        pi.append(turn @ b[:L])
        left.append(e)
        by_ratio = np.outer(turn @ bread[:L, -1], e @ weighted)
        through.append(b[-1] * basis.T @ weighted - by_ratio)
    generalised, weight = row_derivatives(selection.selected, first.index)
    root = np.sqrt(weight)
    rows = selection.W * root[:, None]
    return _Pieces(
        span=np.column_stack([basis, orthonormal(columns.spread[:, L:])]),
        basis=basis,
        pi=np.column_stack(pi),
        left=np.column_stack(left),
        through=np.array(through),
        probit_span=orthonormal(rows),
        probit_loads=rows @ first.information,
        working=np.where(root > 0, generalised / np.where(root > 0, root, 1.0), 0.0),
    )


def _of_one(pieces: _Pieces, chosen: Booleans, codes: Integers) -> tuple[Floats, float]:
    """(2L, 2L) covariance summed over the clusters ``codes`` (A,) of the candidates; and η."""
    L = pieces.basis.shape[1]
    scores, squares, cross = [], [], []
    for rows, deals in _clusters(chosen, codes):
        by_probit = adjusted(pieces.probit_span[rows], pieces.probit_loads[rows], CR3_POWER)[0]
        score = pieces.through @ (by_probit.T @ pieces.working[rows])
        if len(deals):
            loads = adjusted(pieces.span[deals], pieces.basis[deals], CR3_POWER)[0]
            score = score + pieces.left[deals].T @ loads
            squares.append(loads.T @ loads)
            cross.append(pieces.span[deals].T @ loads)
        scores.append(score.ravel())
    G, made = len(scores), np.array(scores)
    with_deals = len(squares)
    if with_deals > L:
        eta = degrees_of_freedom(np.array(squares), np.array(cross))
    else:
        eta = max(with_deals - 1.0, LEAST_DF)
    return np.asarray((G - 1) / G * (made.T @ made)), eta


def _clusters(chosen: Booleans, codes: Integers) -> list[tuple[Integers, Integers]]:
    """The candidates of each cluster, and the places of its deals among the deals."""
    codes = recoded(codes)
    order = np.argsort(codes, kind="stable")
    rows = np.split(order, np.cumsum(np.bincount(codes))[:-1])
    place = np.cumsum(chosen) - 1
    return [(one, place[one[chosen[one]]]) for one in rows]


def _refuse_loaded(
    pieces: _Pieces, chosen: Booleans, name: str, codes: Integers, instruments: tuple[str, ...]
) -> None:
    for _, deals in _clusters(chosen, codes):
        lost = adjusted(pieces.span[deals], pieces.basis[deals], CR3_POWER)[1]
        if (lost > LOADED).any():
            raise one_cluster_decides(name, instruments)
