"""Clustered covariances that hold up with few or uneven clusters: CR2 and CR3.

Both inflate each cluster's residuals for the share of them that the fit has taken away. With
H = QQ' the hat matrix and Q orthonormal, (I - H_gg)^-a differs from the identity only in the
span of a cluster's rows of Q, so no matrix of a cluster's size is ever inverted.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import linalg

from pipeline.core.design import Design
from pipeline.core.estimate import EstimationFailed
from pipeline.core.prices import Booleans, Floats, Integers
from pipeline.estimators import absorb
from pipeline.estimators.algebra import RANK_TOLERANCE, refusal, scaled
from pipeline.estimators.covariance import recoded
from pipeline.estimators.errors import CR2, ErrorRule
from pipeline.estimators.sample import Sample

PUSTEJOVSKY_TIPTON = "Bell and McCaffrey (2002); Pustejovsky and Tipton (2018)"
JACKKNIFE = "Bell and McCaffrey (2002); MacKinnon, Nielsen and Webb (2023)"
SINGULAR = 1e-9
LOADED = 1e-6
FEWEST_DF = 4.0
LEAST_DF = 0.01
"""Where no residual tells an error: its p is near one and its interval has no end in sight."""
LARGEST_BASIS = 40_000_000


@dataclass(frozen=True, slots=True, eq=False)
class Basis:
    """What clustered inference needs of the regressors, effects included.

    Attributes:
        Q: (n, p) orthonormal columns that span the regressors and the effects that are not
            nested in the clusters; those that are drop out (Pustejovsky and Tipton 2018, th. 2).
        loads: (n, k) X(X'X)⁻¹, effects taken out of X: the weight of each row in a coefficient.
        codes: (n,) cluster of each row, numbered from 0 without gaps.
    """

    Q: Floats
    loads: Floats
    codes: Integers

    @property
    def groups(self) -> int:
        """Number of clusters."""
        return int(self.codes.max()) + 1

    def rows(self) -> list[Integers]:
        """The rows of each cluster, in the clusters' order."""
        order = np.argsort(self.codes, kind="stable")
        return np.split(order, np.cumsum(np.bincount(self.codes))[:-1])


@dataclass(frozen=True, slots=True, eq=False)
class FewClusters:
    """A covariance (k, k), the degrees of freedom of each coefficient's t (k,), and whether a
    coefficient (k,) rests on one cluster, whose own residuals cannot tell its error.
    """

    covariance: Floats
    df: Floats
    one_cluster: Booleans


def basis_of(sample: Sample, design: Design, codes: Integers) -> Basis:
    """The basis of a sample of ``design`` whose rows lie in the clusters ``codes`` (n,).

    Raises:
        InputProblem: ``covariance_option`` when the effects outside the clusters have too many
            levels to be laid out.
    """
    Q, R = linalg.qr(scaled(sample.X)[0], mode="economic")
    inverse = linalg.solve_triangular(R, np.eye(len(R))) / scaled(sample.X)[1][:, None]
    loads = np.asarray(Q @ inverse.T, dtype=np.float64)
    regressors = np.asarray(Q, dtype=np.float64)
    return Basis(span_of(sample, design, codes, regressors), loads, recoded(codes))


def span_of(sample: Sample, design: Design, codes: Integers, Q: Floats) -> Floats:
    """(n, p) orthonormal columns: ``Q`` (n, k), and before them the effects across the clusters.

    Q is orthonormal and free of the effects; the problem is that of :func:`basis_of`.
    """
    effects = {name: design.effects[name][sample.kept] for name in sample.levels}
    inside = {name: c for name, c in effects.items() if absorb.nested(c, {"": codes})}
    across = [c for name, c in effects.items() if name not in inside]
    if not across:
        return Q
    _refuse_large(sample.n, across)
    dummies = np.concatenate([np.eye(int(recoded(c).max()) + 1)[recoded(c)] for c in across], 1)
    return np.column_stack([_span(dummies, inside), Q])


def _refuse_large(n: int, across: list[Integers]) -> None:
    levels = sum(int(recoded(c).max()) + 1 for c in across)
    if n * levels > LARGEST_BASIS:
        raise refusal(
            "covariance_option",
            "covariance",
            f"{n} deals and {levels} levels of effects that cut across the clusters",
            f"deals times levels below {LARGEST_BASIS}",
            "use CR1 errors, or cluster by a dimension that holds the effects",
        )


def _span(dummies: Floats, inside: dict[str, Integers]) -> Floats:
    """Orthonormal columns for ``dummies`` (n, m), the effects ``inside`` taken out first."""
    left = absorb.demean(dummies, inside) if inside else dummies
    Q, R, _ = linalg.qr(left, mode="economic", pivoting=True)
    size = np.abs(np.diag(R))
    rank = int((size > RANK_TOLERANCE * np.sqrt(len(left)) * max(float(size[0]), 1.0)).sum())
    return np.asarray(Q[:, :rank], dtype=np.float64)


def small_sample(basis: Basis, residuals: Floats, kind: str) -> FewClusters:
    """CR2 or CR3 of the coefficients, ``residuals`` (n,) those of the fit.

    Scores X_g'A_g e_g with A_g = (I - H_gg)^(-1/2) for CR2, unbiased when errors are independent
    with one variance, and A_g = (I - H_gg)⁻¹ with the factor (G - 1)/G for CR3, which is the
    jackknife over clusters about the full estimate (Bell and McCaffrey 2002). Directions with no
    residual left are dropped, as a generalised inverse does (Pustejovsky and Tipton 2018).

    df of CR2: Satterthwaite's (Σλ)²/Σλ² for each coefficient, λ the eigenvalues of P'P under
    independent errors, p_g = (I - H)_g A_g X_g (X'X)⁻¹c (Bell and McCaffrey 2002; Imbens and
    Kolesár 2016); of CR3: G - 1. Units as the coefficients' squared.
    """
    k, G = basis.loads.shape[1], basis.groups
    power = 0.5 if kind == CR2 else 1.0
    scores, squares = np.empty((G, k)), np.empty((G, k))
    cross = np.empty((G, basis.Q.shape[1], k))
    alone = np.zeros(k, dtype=np.bool_)
    largest = np.linalg.norm(basis.loads, axis=0)
    for g, rows in enumerate(basis.rows()):
        Q = basis.Q[rows]
        loads, lost = adjusted(Q, basis.loads[rows], power)
        alone |= lost > LOADED * largest
        scores[g] = loads.T @ residuals[rows]
        squares[g] = np.einsum("ij,ij->j", loads, loads)
        cross[g] = Q.T @ loads
    V = scores.T @ scores
    if kind == CR2:
        df = np.array([_satterthwaite(squares[:, j], cross[:, :, j]) for j in range(k)])
    else:
        V, df = V * (G - 1) / G, np.full(k, G - 1.0)
    return FewClusters(np.asarray(V), df, alone)


def adjusted(Q: Floats, loads: Floats, power: float) -> tuple[Floats, Floats]:
    """One cluster's (I - QQ')^-power times ``loads`` (n_g, k), Q (n_g, p) its rows of the basis.

    Directions with no residual left are dropped; second, (k,) the largest part a load had there.
    """
    U, s, _ = np.linalg.svd(Q, full_matrices=False)
    free = 1 - np.minimum(s, 1.0) ** 2
    kept = free > SINGULAR
    weight = np.where(kept, np.where(kept, free, 1.0) ** -power, 0.0) - 1
    turned = U.T @ loads
    lost = np.abs(turned[~kept]).max(axis=0, initial=0.0)
    return np.asarray(loads + U @ (weight[:, None] * turned)), np.asarray(lost)


def _satterthwaite(squares: Floats, cross: Floats) -> float:
    """(tr P'P)²/‖P'P‖², P'P = diag(``squares`` (G,)) - ``cross`` (G, p) times its transpose."""
    gram = np.diag(squares) - cross @ cross.T
    trace, size = float(np.trace(gram)), float(np.sum(gram * gram))
    return max(trace * trace / size, LEAST_DF) if size > 0 else LEAST_DF


def of_sample(sample: Sample, design: Design, residuals: Floats) -> FewClusters:
    """The rule's covariance of a fitted sample; ``residuals`` (n,).

    Raises:
        InputProblem: ``cluster_decides`` if one cluster alone identifies the treatment.
        EstimationFailed: if the degrees of freedom of the treatment come out below one.
    """
    ((name, codes),) = sample.rule.clusters.items()
    few = small_sample(basis_of(sample, design, codes), residuals, sample.rule.kind)
    at = sample.names.index(design.treatment)
    if few.one_cluster[at]:
        raise refusal(
            "cluster_decides",
            design.treatment,
            f"one cluster by {name} alone decides the coefficient of {design.treatment}",
            f"{design.treatment} that varies in at least two clusters",
            "cluster by a finer dimension, or do not read this coefficient",
        )
    if not few.df[at] >= 1 - 1e-9:
        raise EstimationFailed(
            f"the error of {design.treatment} has {few.df[at]:.2f} degrees of freedom: too few "
            f"clusters by {name} tell it"
        )
    return few


def df_sentence(rule: ErrorRule, treatment: str, df: float) -> str:
    """Where the degrees of freedom of the treatment's t come from, in words."""
    ((name, groups),) = rule.counts.items()
    if rule.kind == CR2:
        return (
            f"Student t with {df:.1f} degrees of freedom, Satterthwaite's for {treatment} "
            f"({groups} clusters by {name})"
        )
    return (
        f"Student t with {df:.0f} degrees of freedom, the number of clusters "
        f"({groups} by {name}) less one"
    )


def notes(rule: ErrorRule, names: tuple[str, ...], few: FewClusters, at: int) -> tuple[str, ...]:
    """What a reader must know; ``at`` is the treatment's place among ``names``.

    Below four Satterthwaite degrees of freedom the t approximation itself fails (Tipton 2015,
    from memory).
    """
    found = []
    if rule.kind == CR2 and few.df[at] < FEWEST_DF:
        found.append(
            f"The error of {names[at]} has {few.df[at]:.1f} degrees of freedom, fewer than "
            "four: too few clusters tell it, and its p-value is not to be leaned on."
        )
    elif rule.kind == CR2:
        found.append(
            "Every interval uses its own coefficient's degrees of freedom; those shown are of the "
            "feature asked about."
        )
    guilty = [name for name, alone in zip(names, few.one_cluster, strict=True) if alone]
    if guilty:
        found.append(
            f"One cluster alone decides {', '.join(guilty)}: the errors shown for it cannot hold "
            "that cluster's own shock."
        )
    return tuple(found)
