"""The pieces of an instrumental-variables fit: its columns and the regressions on instruments."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import linalg

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import Estimate
from pipeline.core.prices import Floats
from pipeline.estimators import absorb
from pipeline.estimators.algebra import partial_out, refusal, refuse_dependent, solve
from pipeline.estimators.anderson_rubin import ReducedForms
from pipeline.estimators.covariance import cluster_sums, intersection
from pipeline.estimators.errors import (
    CLUSTER,
    ErrorRule,
    cautions,
    choose_errors,
    degrees_of_freedom,
    factor,
    positive,
    sandwich,
    words,
)
from pipeline.estimators.sample import Sample, plain, within

SUPPORTED = ("classical", "hc0", "hc1")
SAME_VARIABLE = 0.999


@dataclass(frozen=True, slots=True, eq=False)
class Parts:
    """Columns of an instrumental-variables fit, fixed effects taken out of all of them.

    Attributes:
        sample: the sample; its X (n, k) holds the treatment among the regressors.
        at: the treatment's column in X.
        instruments: L names.
        controls: (n, k - 1) the other columns of X.
        control_names: their names.
        y: (n,) outcome, D: (n,) treatment and Z: (n, L) instruments, controls taken out of each.
        spread: (n, L + k - 1) instruments and controls, the regressors of the first stage.
    """

    sample: Sample
    at: int
    instruments: tuple[str, ...]
    controls: Floats
    control_names: tuple[str, ...]
    y: Floats
    D: Floats
    Z: Floats
    spread: Floats

    @property
    def k_first(self) -> int:
        """Coefficients of the first stage, without fixed effects."""
        return int(self.spread.shape[1])


def parts_of(design: Design, options: FitOptions) -> Parts:
    """The columns, refused if they cannot identify the treatment's coefficient.

    Raises:
        InputProblem: ``under_identified``, ``instrument_is_treatment``, ``instrument_is_control``,
            ``instrument_collinear``, ``too_many_instruments`` (as many as clusters),
            ``absorbed``, ``no_variation``, ``collinear``, ``few_rows``, or a problem of
            clusters or covariance.
    """
    if not design.instruments:
        raise refusal(
            "under_identified",
            "instruments",
            f"no instrument for {design.treatment}",
            "at least one",
            "declare an instrument or use least squares",
        )
    check_names(design)
    sample = _sample(design, options)
    at = sample.names.index(design.treatment)
    refuse_dependent(sample.X, sample.names)
    _check_instruments(design, sample, at)
    controls = np.delete(sample.X, at, axis=1)
    left = partial_out(np.column_stack([sample.y, sample.X[:, at], sample.Z]), controls)
    parts = Parts(
        sample=sample,
        at=at,
        instruments=design.instruments,
        controls=controls,
        control_names=tuple(np.delete(np.array(sample.names, dtype=object), at)),
        y=left[:, 0],
        D=left[:, 1],
        Z=left[:, 2:],
        spread=np.column_stack([sample.Z, controls]),
    )
    _check_same(design, parts)
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


def check_names(design: Design) -> None:
    if design.treatment in design.instruments:
        raise refusal(
            "instrument_is_treatment",
            design.treatment,
            "the treatment among its instruments",
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


def _check_instruments(design: Design, sample: Sample, at: int) -> None:
    absorb.refuse_absorbed(design.Z[sample.kept], sample.Z, design.instruments)
    controls = np.delete(sample.X, at, axis=1)
    names = tuple(name for column, name in enumerate(sample.names) if column != at)
    refuse_dependent(
        np.column_stack([controls, sample.Z]),
        (*names, *design.instruments),
        "instrument_collinear",
    )
    free = sample.n - len(names) - len(design.instruments) - sample.absorbed
    if free < 1:
        raise refusal(
            "few_rows",
            ", ".join(design.instruments),
            f"{sample.n} deals, {free} to spare",
            "more deals than coefficients in the first stage",
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


def _check_same(design: Design, parts: Parts) -> None:
    left = solve(parts.Z, parts.D)[1]
    total = float(parts.D @ parts.D)
    if 1 - float(left @ left) / total <= SAME_VARIABLE:
        return
    alone = (parts.Z.T @ parts.D) ** 2 / np.sum(parts.Z**2, axis=0) / total
    raise refusal(
        "instrument_is_treatment",
        parts.instruments[int(alone.argmax())],
        f"the instruments reproduce {design.treatment} (partial R² above {SAME_VARIABLE})",
        "instruments that move the treatment without being it",
        "an instrument that is the treatment under another name removes no bias: replace it",
    )


def reduced_forms(parts: Parts) -> ReducedForms:
    """Outcome and treatment on the instruments, controls and effects out, with joint covariance.

    By Frisch and Waugh (1933) the blocks equal those of the full regressions. The covariance is
    made for orthonormal instruments and for y - α̂D, α̂ the two-stage estimate, and then carried
    over: where a two-way covariance has to be repaired, the repair then depends neither on how
    the instruments are combined nor on a multiple of the treatment added to the outcome.
    """
    sample = parts.sample
    L, k = len(parts.instruments), parts.k_first + sample.counted
    both, residuals, _ = solve(parts.Z, np.column_stack([parts.y, parts.D]))
    Q, R = linalg.qr(parts.Z, mode="economic")
    pi = R @ both
    alpha = float(pi[:, 1] @ pi[:, 0]) / float(pi[:, 1] @ pi[:, 1])
    turned = residuals @ np.array([[1.0, 0.0], [-alpha, 1.0]])
    size = np.linalg.norm(turned, axis=0)
    size = np.where(size > 0, size, 1.0)
    basis = np.asarray(Q, dtype=np.float64)
    errors = sandwich(sample.rule, basis, np.eye(L), np.asarray(turned / size), k, unit_free=False)
    back = np.kron(
        np.array([[size[0], alpha * size[1]], [0.0, size[1]]]),
        linalg.solve_triangular(R, np.eye(L)),
    )
    V = np.asarray(back @ errors.covariance @ back.T, dtype=np.float64)
    df, _ = degrees_of_freedom(sample.rule, parts.k_first + sample.absorbed)
    names = tuple(f"{of} {z}" for of in ("outcome on", "first stage") for z in parts.instruments)
    return ReducedForms(both[:, 0], both[:, 1], positive(V, names), df, errors.floored)


def stage(design: Design, options: FitOptions, parts: Parts, *, of_treatment: bool) -> Estimate:
    """The first stage (treatment) or the reduced form (outcome) on instruments and controls.

    Same rows, covariance and degrees-of-freedom rule as the second stage. ``fit``: r_squared
    (within the effects if there are any, else about the mean), partial_r_squared of the
    instruments, small_sample_factor.
    """
    sample = parts.sample
    target = sample.X[:, parts.at] if of_treatment else sample.y
    partial = parts.D if of_treatment else parts.y
    outcome = design.treatment if of_treatment else design.outcome
    names = (*parts.instruments, *parts.control_names)
    b, e, bread = solve(parts.spread, target)
    squares, k = float(e @ e), parts.k_first + sample.counted
    errors = sandwich(sample.rule, parts.spread, bread, e[:, None], k)
    df, sentence = degrees_of_freedom(sample.rule, parts.k_first + sample.absorbed)
    return Estimate(
        estimator="first_stage" if of_treatment else "reduced_form",
        title="First stage" if of_treatment else "Reduced form",
        estimand=f"difference in mean {outcome} associated with one more unit of each instrument, "
        "holding the controls fixed",
        names=names,
        coefficients=b,
        covariance=positive(errors.covariance, names),
        df=df,
        df_rule=sentence,
        covariance_name=words(sample.rule),
        n=sample.n,
        treatment=parts.instruments[0],
        outcome=outcome,
        clusters=sample.rule.counts,
        effects=sample.levels,
        fit={
            "r_squared": 1 - squares / float(np.sum((target - target.mean()) ** 2)),
            "partial_r_squared": 1 - squares / float(partial @ partial),
            **multiplier(sample, k),
        },
        scores=errors.influence,
        citation="Angrist and Pischke (2009), ch. 4",
        notes=(*sample.notes, *cautions(sample.rule, errors.floored)),
        level=options.level,
    )


def multiplier(sample: Sample, k: int) -> dict[str, float]:
    """small_sample_factor, where one number makes the covariance from the scores."""
    value = factor(sample.rule, k)
    return {} if np.isnan(value) else {"small_sample_factor": value}


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
