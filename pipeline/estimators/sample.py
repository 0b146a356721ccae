"""The rows and columns a linear estimator works on, after fixed effects are taken out."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from pipeline.core.design import Design, FitOptions
from pipeline.core.prices import Booleans, Floats, Integers
from pipeline.estimators import absorb
from pipeline.estimators.algebra import refusal
from pipeline.estimators.covariance import groups_of, recoded
from pipeline.estimators.errors import FEW, ErrorRule, choose_errors


@dataclass(frozen=True, slots=True, eq=False)
class Sample:
    """What is regressed on what.

    Attributes:
        y: (n,) outcome, effects taken out.
        X: (n, k) regressors, effects taken out; no constant if effects were.
        names: k names.
        Z: (n, L) excluded instruments, effects taken out.
        rule: the treatment of the errors.
        counted: coefficients of the effects in the small-sample factor.
        absorbed: coefficients of the effects in n - k.
        hat: (n,) leverage of the effects, zero without; None when it is not known in closed form.
        levels: fixed effect -> groups left.
        total: sum of squares of the outcome about its mean, before the effects.
        outside: rows dropped as singletons.
        kept: (n_design,) rows of the design that are in the sample.
        notes: what a reader must know about the sample.
    """

    y: Floats
    X: Floats
    names: tuple[str, ...]
    Z: Floats
    rule: ErrorRule
    counted: int
    absorbed: int
    hat: Floats | None
    levels: dict[str, int]
    total: float
    outside: int
    kept: Booleans
    notes: tuple[str, ...]

    @property
    def n(self) -> int:
        """Rows."""
        return len(self.y)


def plain(design: Design, rule: ErrorRule) -> Sample:
    """The design as it stands, its effects ignored and that said.

    Raises:
        InputProblem: ``no_variation``.
    """
    _check_treatment(design)
    _check_outcome(design.y)
    notes: tuple[str, ...] = ()
    if design.effects:
        listed = " and ".join(design.effects)
        notes = (f"The fixed effects ({listed}) are not in this column.",)
    return Sample(
        y=design.y,
        X=design.X,
        names=design.names,
        Z=_instruments(design),
        rule=rule,
        counted=0,
        absorbed=0,
        hat=np.zeros(design.n),
        levels={},
        total=_about_mean(design.y),
        outside=0,
        kept=np.ones(design.n, dtype=np.bool_),
        notes=notes,
    )


def within(design: Design, options: FitOptions, supported: tuple[str, ...] | None = None) -> Sample:
    """The design's effects taken out of every column, singletons dropped first.

    The errors are clustered if the design has clusters and no other covariance is asked for,
    HC1 otherwise. Effects nested in a cluster dimension are not counted in the small-sample
    factor, the constant is (Cameron and Miller 2015, sec. III.B; Correia 2017).

    Raises:
        InputProblem: ``no_effects``, ``few_rows``, ``no_variation``, ``absorbed``, or a problem
            of the clusters or the covariance.
        EstimationFailed: if the projections do not converge.
    """
    if not design.effects:
        raise refusal(
            "no_effects",
            "fixed_effects",
            "no fixed effect",
            "at least one",
            "declare an effect or use least squares",
        )
    keep = absorb.without_singletons(design.effects)
    if keep.sum() <= design.X.shape[1]:
        raise refusal(
            "few_rows",
            ", ".join(design.effects),
            f"{int(keep.sum())} deals in groups of two or more",
            "more deals than coefficients",
            "use a coarser fixed effect",
        )
    effects = {name: codes[keep] for name, codes in design.effects.items()}
    clusters = {name: codes[keep] for name, codes in design.clusters.items()}
    every = ("classical", "hc0", "hc1", *FEW, *(("hc2", "hc3") if len(effects) == 1 else ()))
    rule = choose_errors(
        clusters,
        int(keep.sum()),
        options,
        otherwise="hc1",
        cluster_by_default=True,
        supported=supported or every,
    )
    return _demeaned(design, keep, effects, rule)


def _demeaned(
    design: Design, keep: Booleans, effects: dict[str, Integers], rule: ErrorRule
) -> Sample:
    constants = np.ptp(design.X, axis=0) == 0
    constants[design.names.index(design.treatment)] = False
    names = tuple(
        name for name, constant in zip(design.names, constants, strict=True) if not constant
    )
    X, Z, y = design.X[keep][:, ~constants], _instruments(design)[keep], design.y[keep]
    _check_outcome(y)
    columns = np.column_stack([y, X, Z])
    left = absorb.demean(columns, effects)
    k = len(names)
    absorb.refuse_absorbed(X, left[:, 1 : 1 + k], names)
    absorb.refuse_absorbed(y[:, None], left[:, :1], (design.outcome,))
    free = {n: c for n, c in effects.items() if not absorb.nested(c, rule.clusters)}
    return Sample(
        y=left[:, 0],
        X=left[:, 1 : 1 + k],
        names=names,
        Z=left[:, 1 + k :],
        rule=rule,
        counted=absorb.coefficients_of(free),
        absorbed=absorb.coefficients_of(effects),
        hat=_group_leverage(effects),
        levels={n: groups_of(c) for n, c in effects.items()},
        total=_about_mean(y),
        outside=int((~keep).sum()),
        kept=keep,
        notes=_notes(keep, effects),
    )


def _notes(keep: Booleans, effects: dict[str, Integers]) -> tuple[str, ...]:
    notes = []
    dropped = int((~keep).sum())
    if dropped:
        notes.append(
            f"{dropped} deals alone in their group of a fixed effect were set aside: "
            "the effect fits them exactly, so they say nothing about the coefficients."
        )
    for name, codes in effects.items():
        others = {other: c for other, c in effects.items() if other != name}
        holder = next((o for o, c in others.items() if absorb.nested(c, {name: codes})), None)
        if holder is not None:
            notes.append(f"{name} is fixed within {holder}: it adds nothing to that effect.")
    return tuple(notes)


def _group_leverage(effects: dict[str, Integers]) -> Floats | None:
    if len(effects) != 1:
        return None
    codes = recoded(next(iter(effects.values())))
    return np.asarray(1.0 / np.bincount(codes)[codes], dtype=np.float64)


def _instruments(design: Design) -> Floats:
    return design.Z if design.instruments else np.empty((design.n, 0))


def _about_mean(y: Floats) -> float:
    return float(np.sum((y - y.mean()) ** 2))


def _check_treatment(design: Design) -> None:
    column = design.X[:, design.names.index(design.treatment)]
    if np.ptp(column) == 0:
        raise refusal(
            "no_variation",
            design.treatment,
            "the same value in every deal",
            "a treatment that differs between deals",
            "widen the sample or ask another question",
        )


def _check_outcome(y: Floats) -> None:
    if np.ptp(y) == 0:
        raise refusal(
            "no_variation",
            "outcome",
            "the same outcome in every deal",
            "outcomes that differ",
            "check the outcome",
        )
