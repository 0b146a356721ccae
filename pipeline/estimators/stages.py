"""The pieces of an instrumental-variables fit: its columns and the regressions on instruments."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import linalg

from pipeline.core.design import Design, FitOptions
from pipeline.core.prices import Floats
from pipeline.estimators import absorb
from pipeline.estimators.algebra import (
    RANK_TOLERANCE,
    orthonormal,
    partial_out,
    refusal,
    refuse_dependent,
    solve,
)
from pipeline.estimators.anderson_rubin import ReducedForms
from pipeline.estimators.covariance import cluster_sums, intersection
from pipeline.estimators.errors import (
    CLUSTER,
    ErrorRule,
    choose_errors,
    degrees_of_freedom,
    positive,
    sandwich,
)
from pipeline.estimators.sample import Sample, plain, within

SUPPORTED = ("classical", "hc0", "hc1")
SAME_VARIABLE = 0.999


@dataclass(frozen=True, slots=True, eq=False)
class Parts:
    """Columns of an instrumental-variables fit, fixed effects taken out of all of them.

    Attributes:
        design: what they are the columns of.
        sample: the sample; its X (n, k) holds the p endogenous variables among the regressors.
        endogenous: p names, the treatment first.
        places: their columns in X.
        instruments: L names.
        controls: (n, k - p) the other columns of X.
        control_names: their names.
        y: (n,) outcome, E: (n, p) endogenous and Z: (n, L) instruments, controls taken out.
        D: (n,) the treatment, the first column of E.
        spread: (n, L + k - p) instruments and controls, the regressors of the first stages.
    """

    design: Design
    sample: Sample
    endogenous: tuple[str, ...]
    places: tuple[int, ...]
    instruments: tuple[str, ...]
    controls: Floats
    control_names: tuple[str, ...]
    y: Floats
    E: Floats
    D: Floats
    Z: Floats
    spread: Floats

    @property
    def at(self) -> int:
        """The treatment's column in X."""
        return self.places[0]

    @property
    def k_first(self) -> int:
        """Coefficients of a first stage, without fixed effects."""
        return int(self.spread.shape[1])


def parts_of(design: Design, options: FitOptions) -> Parts:
    """The columns, refused if they cannot identify the coefficients of the endogenous variables.

    Raises:
        InputProblem: ``under_identified``, ``instrument_is_treatment``, ``instrument_is_control``,
            ``instrument_collinear``, ``too_many_instruments`` (as many as clusters),
            ``absorbed``, ``no_variation``, ``collinear``, ``few_rows``, or a problem of
            clusters or covariance.
    """
    endogenous = design.endogenous
    check_order(design.instruments, endogenous)
    check_names(design)
    sample = _sample(design, options)
    refuse_dependent(sample.X, sample.names)
    gone = [name for name in endogenous if name not in sample.names]
    if gone:
        raise refusal(
            "no_variation",
            ", ".join(gone),
            "the same value in every deal",
            "endogenous variables that vary",
            "take it out of the variables the instruments move",
        )
    places = tuple(sample.names.index(name) for name in endogenous)
    controls = np.delete(sample.X, places, axis=1)
    control_names = tuple(name for name in sample.names if name not in endogenous)
    _check_instruments(design, sample, controls, control_names)
    whole = np.column_stack([sample.y, sample.X[:, places], sample.Z])
    left = partial_out(whole, controls)
    last = 1 + len(endogenous)
    parts = Parts(
        design=design,
        sample=sample,
        endogenous=endogenous,
        places=places,
        instruments=design.instruments,
        controls=controls,
        control_names=control_names,
        y=left[:, 0],
        E=left[:, 1:last],
        D=left[:, 1],
        Z=left[:, last:],
        spread=np.column_stack([sample.Z, controls]),
    )
    _check_same(parts)
    _check_rank(parts)
    return parts


def _sample(design: Design, options: FitOptions) -> Sample:
    if design.effects:
        return within(design, options, SUPPORTED)
    rule = choose_errors(
        design.clusters,
        design.n,
        options,
        otherwise="hc1",
        cluster_by_default=True,
        supported=SUPPORTED,
    )
    return plain(design, rule)


def check_order(instruments: tuple[str, ...], endogenous: tuple[str, ...]) -> None:
    """The order condition: at least as many instruments as endogenous variables."""
    L, p = len(instruments), len(endogenous)
    if p <= L:
        return
    several = p > 1
    raise refusal(
        "under_identified",
        "instruments",
        f"{L} instrument{'' if L == 1 else 's'} for {p} endogenous variables "
        f"({', '.join(endogenous)})"
        if several
        else f"no instrument for {endogenous[0]}",
        f"at least {p} instruments" if several else "at least one",
        "declare more instruments, or hold the other variables fixed as controls"
        if several
        else "declare an instrument or use least squares",
    )


def check_names(design: Design) -> None:
    """Refuse an instrument that is a regressor too."""
    own = [name for name in design.endogenous if name in design.instruments]
    if own:
        raise refusal(
            "instrument_is_treatment",
            own[0],
            "the treatment among its instruments"
            if own[0] == design.treatment
            else "an endogenous variable among the instruments",
            "an instrument other than the treatment",
            "take it out of the instruments",
        )
    both = [name for name in design.instruments if name in design.names]
    if both:
        raise refusal(
            "instrument_is_control",
            ", ".join(both),
            "an instrument that is also a control",
            "an instrument excluded from the outcome",
            "take it out of one of the two",
        )


def _check_instruments(
    design: Design, sample: Sample, controls: Floats, names: tuple[str, ...]
) -> None:
    absorb.refuse_absorbed(design.Z[sample.kept], sample.Z, design.instruments)
    refuse_dependent(
        np.column_stack([controls, sample.Z]),
        (*names, *design.instruments),
        "instrument_collinear",
    )
    free = sample.n - len(names) - len(design.instruments) - sample.absorbed
    needed = 1 + len(design.endogenous)
    if free < needed:
        raise refusal(
            "few_rows",
            ", ".join(design.instruments),
            f"{sample.n} deals, {free} more than coefficients in the first stage",
            f"at least {needed} more: one for the outcome and one for each endogenous variable",
            "use fewer instruments",
        )
    fewest = min(sample.rule.counts.values(), default=sample.n)
    if len(design.instruments) > fewest - 1:
        raise refusal(
            "too_many_instruments",
            ", ".join(design.instruments),
            f"{len(design.instruments)} instruments, {fewest} clusters",
            "fewer instruments than clusters less one",
            "use fewer instruments or finer clusters",
        )


def _check_same(parts: Parts) -> None:
    """Refuse instruments that reproduce an endogenous variable, or a combination of several.

    The largest squared canonical correlation of the two sets (Hotelling 1936) is the largest
    partial R² any combination reaches; with one endogenous variable it is the variable's own.
    """
    basis = orthonormal(parts.Z)
    left, strength, _ = linalg.svd(basis.T @ orthonormal(parts.E))
    if strength[0] ** 2 <= SAME_VARIABLE:
        return
    combination = basis @ left[:, 0]
    alone = (parts.Z.T @ combination) ** 2 / np.sum(parts.Z**2, axis=0)
    raise refusal(
        "instrument_is_treatment",
        parts.instruments[int(alone.argmax())],
        f"the instruments reproduce {_reproduced(parts)} (partial R² above {SAME_VARIABLE})",
        "instruments that move the treatment without being it",
        "an instrument that is the treatment under another name removes no bias: replace it",
    )


def _reproduced(parts: Parts) -> str:
    left = solve(parts.Z, parts.E)[1]
    shares = 1 - np.sum(left**2, axis=0) / np.sum(parts.E**2, axis=0)
    whole = [n for n, s in zip(parts.endogenous, shares, strict=True) if s > SAME_VARIABLE]
    return " and ".join(whole) or f"a combination of {' and '.join(parts.endogenous)}"


def _check_rank(parts: Parts) -> None:
    """Refuse when what the instruments predict of the endogenous variables is dependent."""
    if len(parts.endogenous) == 1:
        return
    size = np.linalg.norm(parts.E, axis=0)
    predicted = (parts.E - solve(parts.Z, parts.E)[1]) / size
    if linalg.svdvals(predicted)[-1] > RANK_TOLERANCE:
        return
    raise refusal(
        "under_identified",
        ", ".join(parts.endogenous),
        "the instruments move these variables in one proportion only",
        f"{len(parts.endogenous)} independent movements",
        "add an instrument that moves them in another proportion",
    )


def reduced_forms(parts: Parts) -> ReducedForms:
    """Outcome and endogenous on the instruments, controls and effects out, joint covariance.

    By Frisch and Waugh (1933) the blocks equal those of the full regressions. The covariance is
    made for orthonormal instruments and for y - Eα̂, α̂ the two-stage estimate, and then carried
    over: where a two-way covariance has to be repaired, the repair then depends neither on how
    the instruments are combined nor on a multiple of the treatment added to the outcome.
    """
    sample = parts.sample
    L, k = len(parts.instruments), parts.k_first + sample.counted
    both, residuals, _ = solve(parts.Z, np.column_stack([parts.y, parts.E]))
    Q, R = linalg.qr(parts.Z, mode="economic")
    turn, back = turned(R @ both, residuals)
    basis = np.asarray(Q, dtype=np.float64)
    errors = sandwich(sample.rule, basis, np.eye(L), residuals @ turn, k, unit_free=False)
    carry = np.kron(back, linalg.solve_triangular(R, np.eye(L)))
    V = np.asarray(carry @ errors.covariance @ carry.T, dtype=np.float64)
    df, _ = degrees_of_freedom(sample.rule, parts.k_first + sample.absorbed)
    heads = ("outcome on", *(f"first stage of {name}" for name in parts.endogenous))
    names = tuple(f"{of} {z}" for of in heads for z in parts.instruments)
    return ReducedForms(
        both[:, 0], both[:, 1], positive(V, names), df, errors.floored, others=both[:, 2:]
    )


def turned(moments: Floats, columns: Floats) -> tuple[Floats, Floats]:
    """A (m, m) turn of the m = 1 + p columns (n, m), and what carries a covariance back.

    The outcome becomes y - Eα̂, α̂ from ``moments`` (L, m), and every column unit length.
    """
    alpha = np.linalg.lstsq(moments[:, 1:], moments[:, 0])[0]
    turn = np.eye(columns.shape[1])
    turn[1:, 0] = -alpha
    size = np.linalg.norm(columns @ turn, axis=0)
    turn = turn / np.where(size > 0, size, 1.0)
    return np.asarray(turn), np.asarray(np.linalg.inv(turn).T)


def moment_covariance(parts: Parts, residuals: Floats) -> Floats:
    """(L, L) Σ z̃z̃'u² or its cluster sums, no small-sample factor; two-way by V₁ + V₂ - V₁₂."""
    return moments_product(parts.sample.rule, parts.Z * residuals[:, None])


def moments_product(rule: ErrorRule, moments: Floats) -> Floats:
    """(m, m) sum of the products of ``moments`` (n, m) over rows, or over clusters of their sums.

    No small-sample factor; two dimensions by V₁ + V₂ - V₁₂, which need not be positive.
    """
    if rule.kind != CLUSTER:
        return np.asarray(moments.T @ moments)
    codes = list(rule.clusters.values())
    signed = [(1.0, c) for c in codes]
    if len(codes) > 1:
        signed.append((-1.0, intersection(codes[0], codes[1])))
    total = np.zeros((moments.shape[1],) * 2)
    for sign, code in signed:
        sums = cluster_sums(moments, code)
        total += sign * (sums.T @ sums)
    return total
