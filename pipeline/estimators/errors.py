"""Which covariance a fit uses, its degrees of freedom, and the words for both."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from pipeline.core.design import FitOptions
from pipeline.core.estimate import EstimationFailed
from pipeline.core.prices import Floats, Integers
from pipeline.estimators import covariance as cov
from pipeline.estimators.algebra import refusal

CLUSTER = "cluster"
CR2, CR3 = "cr2", "cr3"
FEW = (CR2, CR3)
MOST_DIMENSIONS = 2
FEW_CLUSTERS = 40
VERY_FEW_CLUSTERS = 10


@dataclass(frozen=True, slots=True, eq=False)
class ErrorRule:
    """How the errors of ``n`` rows are treated.

    ``kind`` is ``classical``, ``hc0`` to ``hc3``, ``cluster``, ``cr2`` or ``cr3``; ``clusters``
    holds one or two dimensions (one for ``cr2`` and ``cr3``), name -> (n,) codes, and is empty
    for the first five.
    """

    kind: str
    clusters: dict[str, Integers]
    n: int

    @property
    def counts(self) -> dict[str, int]:
        """Cluster dimension -> number of clusters."""
        return {name: cov.groups_of(codes) for name, codes in self.clusters.items()}


@dataclass(frozen=True, slots=True, eq=False)
class Sandwich:
    """A covariance, the influence rows it was summed from and whether it had to be repaired."""

    covariance: Floats
    influence: Floats
    floored: bool = False


def choose_errors(
    clusters: dict[str, Integers],
    n: int,
    options: FitOptions,
    *,
    otherwise: str,
    cluster_by_default: bool = False,
    supported: tuple[str, ...] = ("classical", "hc0", "hc1", "hc2", "hc3"),
) -> ErrorRule:
    """The rule for these options.

    ``otherwise`` is the kind when nothing is asked for; ``cluster_by_default`` clusters then,
    if there are clusters.

    Raises:
        InputProblem: ``covariance_option`` for a kind the estimator does not support,
            ``no_clusters``, ``cluster_dimensions`` (more than two), ``one_cluster`` or
            ``cluster_missing`` (a negative code).
    """
    asked = options.covariance
    if options.cluster or (asked == "auto" and cluster_by_default and clusters):
        _check_clusters(clusters)
        return ErrorRule(CLUSTER, dict(clusters), n)
    kind = otherwise if asked == "auto" else asked
    if kind not in supported:
        raise refusal(
            "covariance_option",
            "covariance",
            f"'{kind}'",
            f"one of {', '.join(supported)}",
            "this estimator has no such covariance: choose another or leave it on auto",
        )
    if kind in FEW:
        _check_clusters(clusters)
        _check_one_dimension(clusters, kind)
        return ErrorRule(kind, dict(clusters), n)
    return ErrorRule(kind, {}, n)


def _check_one_dimension(clusters: dict[str, Integers], kind: str) -> None:
    if len(clusters) > 1:
        raise refusal(
            "cluster_dimensions",
            ", ".join(clusters),
            f"{len(clusters)} dimensions",
            f"one dimension for {kind.upper()}",
            "keep the dimension with fewer clusters, or cluster by both with CR1",
        )


def _check_clusters(clusters: dict[str, Integers]) -> None:
    if not clusters:
        raise refusal(
            "no_clusters",
            "clusters",
            "no cluster dimension",
            "one or two dimensions",
            "declare the dimension in which the deals share shocks",
        )
    if len(clusters) > MOST_DIMENSIONS:
        raise refusal(
            "cluster_dimensions",
            ", ".join(clusters),
            f"{len(clusters)} dimensions",
            "one or two dimensions",
            "keep the two in which the deals share shocks",
        )
    for name, codes in clusters.items():
        if (codes < 0).any():
            raise refusal(
                "cluster_missing",
                name,
                f"{int((codes < 0).sum())} deals without a cluster",
                "a cluster for every deal",
                "fill the identifier or drop the deals",
            )
        if cov.groups_of(codes) < 2:
            raise refusal(
                "one_cluster",
                name,
                "one cluster",
                "at least two, better forty",
                "cluster by a finer dimension or not at all",
            )


def sandwich(
    rule: ErrorRule,
    X: Floats,
    bread: Floats,
    E: Floats,
    k: int,
    hat: Floats | None = None,
    *,
    unit_free: bool = True,
) -> Sandwich:
    """Covariance of the coefficients of m regressions on the same X (n, p), E (n, m) residuals.

    The coefficients are stacked equation by equation into m·p, so that the blocks off the
    diagonal hold the covariances between equations. ``k`` is the number of coefficients in the
    small-sample factor, ``hat`` (n,) the leverages HC2 and HC3 need, ``unit_free`` as in
    :func:`~pipeline.estimators.covariance.two_way_covariance`.
    """
    base = X @ bread
    influence = np.concatenate([base * residual[:, None] for residual in E.T], axis=1)
    if rule.kind == "classical":
        spread = E.T @ E / (rule.n - k)
        return Sandwich(np.asarray(np.kron(spread, bread), dtype=np.float64), influence)
    return of_influence(rule, influence, k, hat, unit_free=unit_free)


def of_influence(
    rule: ErrorRule,
    influence: Floats,
    k: int,
    hat: Floats | None = None,
    *,
    unit_free: bool = True,
) -> Sandwich:
    """The rule's covariance (p, p) of ``influence`` (n, p); every kind but ``classical``."""
    if rule.kind == CLUSTER:
        return _clustered(rule, influence, k, unit_free)
    if rule.kind == "hc0":
        return Sandwich(cov.hc0(influence), influence)
    if rule.kind == "hc1":
        return Sandwich(cov.hc1(influence, k), influence)
    if hat is None:
        raise ValueError(f"{rule.kind} needs leverages")
    weigh = cov.hc2 if rule.kind == "hc2" else cov.hc3
    return Sandwich(weigh(influence, hat), influence)


def _clustered(rule: ErrorRule, influence: Floats, k: int, unit_free: bool) -> Sandwich:
    codes = list(rule.clusters.values())
    if len(codes) == 1:
        return Sandwich(cov.cluster_covariance(influence, codes[0], k), influence)
    both = cov.two_way_covariance(influence, codes[0], codes[1], k, unit_free=unit_free)
    return Sandwich(both.covariance, influence, both.floored)


def positive(covariance: Floats, names: tuple[str, ...]) -> Floats:
    """``covariance`` made exactly symmetric.

    Raises:
        EstimationFailed: if a variance is not positive, naming the coefficient.
    """
    symmetric = (covariance + covariance.T) / 2
    for name, variance in zip(names, np.diag(symmetric), strict=True):
        if not variance > 0:
            raise EstimationFailed(f"the variance of {name} came out as {variance:.3g}")
    return np.asarray(symmetric)


def factor(rule: ErrorRule, k: int) -> float:
    """What multiplies the sum over rows or clusters of scores; NaN where no one number does."""
    if rule.kind == "hc0":
        return 1.0
    if rule.kind == "hc1":
        return rule.n / (rule.n - k)
    if rule.kind == CLUSTER and len(rule.clusters) == 1:
        (groups,) = rule.counts.values()
        return cov.cluster_factor(rule.n, groups, k)
    return float("nan")


def degrees_of_freedom(rule: ErrorRule, k: int) -> tuple[float, str]:
    """Degrees of freedom of t, and the sentence that says where they come from.

    n - k without clusters; the smaller number of clusters less one with them, because the
    normal rejects too often (Cameron and Miller 2015, sec. VI).
    """
    if not rule.clusters:
        df = rule.n - k
        return float(df), f"Student t with n − k = {rule.n} − {k} = {df} degrees of freedom"
    counts = rule.counts
    fewest = min(counts, key=lambda name: counts[name])
    df = counts[fewest] - 1
    least = "smaller number of clusters" if len(counts) > 1 else "number of clusters"
    return float(df), (
        f"Student t with {df} degrees of freedom, the {least} "
        f"({counts[fewest]} by {fewest}) less one"
    )


def words(rule: ErrorRule) -> str:
    """The covariance in words."""
    if rule.kind == "classical":
        return "classical, equal variances"
    if not rule.clusters:
        return f"{rule.kind.upper()}, robust to unequal variances"
    names = " and ".join(rule.clusters)
    if len(rule.clusters) > 1:
        return f"two-way clustered by {names}, each part with its own G/(G − 1)"
    return f"clustered by {names} ({'CR1' if rule.kind == CLUSTER else rule.kind.upper()})"


def cautions(rule: ErrorRule, floored: bool) -> tuple[str, ...]:
    """What a reader must know about the covariance.

    Forty clusters is the usual rule of thumb (Angrist and Pischke 2009, sec. 8.2.3).
    """
    notes = []
    counts = rule.counts if rule.kind == CLUSTER else {}
    for name, groups in counts.items():
        if groups < VERY_FEW_CLUSTERS:
            notes.append(
                f"Only {groups} clusters by {name}: clustered errors are too small here, and a "
                "nominal 5% test rejects far more often. Use a bootstrap made for few clusters."
            )
        elif groups < FEW_CLUSTERS:
            notes.append(
                f"{groups} clusters by {name}: below forty, clustered errors tend to be too small."
            )
    if floored:
        notes.append(
            "The two-way covariance had negative eigenvalues, which were set to zero: "
            "one of the two dimensions carries little of the dependence."
        )
    return tuple(notes)
