"""Both steps of the selection model resampled, whole clusters at a time."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from pipeline.core.design import Design, SelectionRows
from pipeline.core.estimate import EstimationFailed
from pipeline.core.findings import InputProblem
from pipeline.core.prices import Floats, Integers
from pipeline.estimators import batched_probit as batched
from pipeline.estimators.algebra import scaled, solve
from pipeline.estimators.covariance import groups_of, recoded
from pipeline.estimators.probit import Equation, ProbitFit, fit_probit, mills
from pipeline.estimators.workers import spread

CITATION = "Efron and Tibshirani (1993); Cameron, Gelbach and Miller (2008)"
AT_ONCE = 125
WORTH_A_PROCESS = 10_000_000
"""Rows times draws from which a second process earns its start."""


@dataclass(frozen=True, slots=True, eq=False)
class Resampled:
    """What the replications gave.

    Attributes:
        point: (k + 1,) outcome coefficients of the rows as they are.
        first: (B, q) coefficients of the selection equation; ``second`` (B, k + 1) those of the
            outcome, the inverse Mills ratio last. B of the replications asked for succeeded.
        asked: replications drawn.
        failed: those whose probit has no maximum, or whose outcome equation is singular.
        clusters: what was drawn: a cluster dimension, or '' for single candidates.
        groups: how many of them there are.
    """

    point: Floats
    first: Floats
    second: Floats
    asked: int
    failed: int
    clusters: str
    groups: int

    def errors(self) -> Floats:
        """(k + 1,) standard deviations of the outcome coefficients over replications."""
        return np.asarray(self.second.std(axis=0, ddof=1))

    def intervals(self, level: float) -> Floats:
        """(k + 1, 2) percentile intervals."""
        ends = [(1 - level) / 2, (1 + level) / 2]
        return np.asarray(np.quantile(self.second, ends, axis=0).T)


@dataclass(frozen=True, slots=True, eq=False)
class _Steps:
    """The rows of both steps: ``X`` (n, k) of unit length, ``at`` (n,) their candidates."""

    rows: batched.Rows
    equation: Equation
    gamma: Floats
    X: Floats
    length: Floats
    y: Floats
    at: Integers
    groups: int


def bootstrap_both_steps(
    design: Design,
    selection: SelectionRows,
    first: ProbitFit,
    equation: Equation,
    draws: int,
    seed: int,
    workers: int = 0,
) -> Resampled:
    """``draws`` replications of probit and outcome equation, candidates drawn with their cluster.

    Clusters are drawn with replacement, the dimension with fewer of them where there are two,
    single candidates where there is none (Efron and Tibshirani 1993; Cameron, Gelbach and Miller
    2008). A replication whose probit is separated or does not converge is left out and counted.
    Blocks of replications have a random stream each, so that the numbers do not depend on
    ``workers``; 0 leaves it to :mod:`pipeline.estimators.workers` where they are worth their start.

    Raises:
        EstimationFailed: if fewer than half of the replications succeed.
    """
    name, codes = _drawn_by(selection)
    steps = _steps(design, selection, first, equation, codes)
    starts = range(0, draws, AT_ONCE)
    sizes = [min(AT_ONCE, draws - start) for start in starts]
    seeds = np.random.SeedSequence(seed).spawn(len(sizes))
    heavy = len(codes) * draws >= WORTH_A_PROCESS
    parts = spread(_block, steps, list(zip(sizes, seeds, strict=True)), heavy, workers)
    gammas = np.concatenate([part[0] for part in parts])
    outcomes = np.concatenate([part[1] for part in parts])
    good = np.isfinite(gammas).all(axis=1) & np.isfinite(outcomes).all(axis=1)
    if good.sum() < max(2, draws / 2):
        raise EstimationFailed(f"only {int(good.sum())} of {draws} replications gave an estimate")
    failed = int((~good).sum())
    return Resampled(_point(steps), gammas[good], outcomes[good], draws, failed, name, steps.groups)


def _point(steps: _Steps) -> Floats:
    ratio = mills(steps.rows.base[steps.at])
    b = solve(np.column_stack([steps.X, ratio]), steps.y)[0]
    return np.asarray(b / np.append(steps.length, 1.0))


def _drawn_by(selection: SelectionRows) -> tuple[str, Integers]:
    if not selection.clusters:
        return "", np.arange(len(selection.selected))
    name = min(selection.clusters, key=lambda key: groups_of(selection.clusters[key]))
    return name, recoded(selection.clusters[name])


def _steps(
    design: Design, selection: SelectionRows, first: ProbitFit, equation: Equation, codes: Integers
) -> _Steps:
    at = np.flatnonzero(selection.selected)
    row = selection.outcome_row[at]
    X, length = scaled(design.X[row])
    rows = batched.rows_about(first, selection.W, selection.selected, codes)
    groups = int(codes.max()) + 1
    return _Steps(rows, equation, first.coefficients, X, length, design.y[row], at, groups)


def _block(steps: _Steps, draws: int, seed: np.random.SeedSequence) -> tuple[Floats, Floats]:
    """(draws, q) and (draws, k + 1) coefficients, NaN where a replication failed."""
    rng = np.random.default_rng(seed)
    groups = steps.groups
    picks = rng.integers(0, groups, size=(draws, groups))
    counts = np.column_stack([np.bincount(pick, minlength=groups) for pick in picks])
    weights = counts.astype(np.float64)
    delta, maxima = batched.fit_weighted(steps.rows, weights)
    outcomes = _outcomes(steps, delta, weights)
    gammas = (steps.gamma[:, None] + steps.rows.root @ delta).T
    for draw in np.flatnonzero(~maxima | ~np.isfinite(outcomes).all(axis=1)):
        gammas[draw], outcomes[draw] = _alone(steps, counts[:, draw])
    return gammas, outcomes


def _outcomes(steps: _Steps, delta: Floats, weights: Floats) -> Floats:
    """(B, k + 1) weighted least squares of the outcome on (x, λ), by normal equations."""
    k, draws = steps.X.shape[1], weights.shape[1]
    own = steps.rows.codes[steps.at]
    wide = np.column_stack([steps.X, steps.y])
    totals = batched.summed(batched.products(wide), own, steps.groups).T @ weights
    cross, square = np.zeros((k + 1, draws)), np.zeros(draws)
    for start in range(0, len(own), batched.ROWS_AT_ONCE):
        here = slice(start, start + batched.ROWS_AT_ONCE)
        at = steps.at[here]
        ratio = batched.ratios(steps.rows, at, steps.rows.U[at] @ delta)
        weighted = ratio * weights[own[here]]
        cross += wide[here].T @ weighted
        square += np.einsum("ij,ij->j", ratio, weighted)
    joint = batched.symmetric(totals, k + 1)
    A = np.empty((draws, k + 1, k + 1))
    A[:, :k, :k] = joint[:, :k, :k]
    A[:, k, :k] = A[:, :k, k] = cross[:k].T
    A[:, k, k] = square
    b = np.column_stack([joint[:, :k, k], cross[k]])
    return np.asarray(_solved(A, b) / np.append(steps.length, 1.0))


def _solved(A: Floats, b: Floats) -> Floats:
    """(B, m) solutions of A (B, m, m), NaN where a matrix is singular or not finite."""
    fine = np.asarray(np.isfinite(A).all(axis=(1, 2)))
    fine[fine] = np.linalg.cond(A[fine]) < 1e13
    found = np.full(b.shape, np.nan)
    found[fine] = np.linalg.solve(A[fine], b[fine][:, :, None])[:, :, 0]
    return found


def _alone(steps: _Steps, counts: Integers) -> tuple[Floats, Floats]:
    """One replication by the estimator itself, on its rows written out; NaN if it has none."""
    equation, q, k = steps.equation, len(steps.gamma), steps.X.shape[1]
    often = counts[steps.rows.codes]
    drawn = np.repeat(np.arange(len(often)), often)
    again = Equation(
        equation.chosen[drawn], equation.W[drawn], equation.names, equation.outcome, equation.key
    )
    mine = np.repeat(np.arange(len(steps.at)), often[steps.at])
    try:
        fit = fit_probit(again)
    except (InputProblem, EstimationFailed):
        return np.full(q, np.nan), np.full(k + 1, np.nan)
    wide = np.column_stack([steps.X[mine], mills(fit.index[again.chosen])])
    if np.linalg.matrix_rank(wide) < k + 1:
        return fit.coefficients, np.full(k + 1, np.nan)
    return fit.coefficients, solve(wide, steps.y[mine])[0] / np.append(steps.length, 1.0)
