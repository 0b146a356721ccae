"""Instruments that reach the outcome by another way too: how far may they (Conley et al. 2012)?

The outcome is y = αD + x'β + Zγ + ε; the exclusion says γ = 0. Everything here allows γ to differ
from zero, in units of the outcome per unit of the instrument, or as a share of the reduced form:
at a share s the instruments' own way accounts for s of all that they do to the outcome.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import product

import numpy as np

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import ConfidenceSet, Estimate, Shape, TestResult, t_reach
from pipeline.core.prices import Floats
from pipeline.estimators.algebra import refusal, solve
from pipeline.estimators.anderson_rubin import ReducedForms, anderson_rubin_set
from pipeline.estimators.clustered_forms import inverted_forms
from pipeline.estimators.diagnostics import breusch_pagan
from pipeline.estimators.errors import degrees_of_freedom, sandwich
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.stages import Parts

CITATION = "Conley, Hansen and Rossi (2012)"
LEWBEL = "Lewbel (2012)"
LATTICE = 5
MOST_POINTS = 4096


@dataclass(frozen=True, slots=True)
class Allowed:
    """Effect, standard error and interval when the instruments act directly by γ."""

    estimate: float
    std_error: float
    low: float
    high: float


def reduced_form(parts: Parts) -> Floats:
    """(L,) coefficients of the outcome on the instruments, controls and effects held fixed."""
    return solve(parts.Z, parts.y)[0]


def at_violation(parts: Parts, gamma: Floats, level: float) -> Allowed:
    """Two stages on y - Zγ, γ (L,); same covariance and degrees of freedom as the fit itself."""
    sample = parts.sample
    predicted = parts.D - solve(parts.Z, parts.D)[1]
    y = parts.y - parts.Z @ gamma
    bread = np.array([[1.0 / float(predicted @ predicted)]])
    estimate = float(predicted @ y) * float(bread[0, 0])
    left = y - estimate * parts.D
    k = len(sample.names)
    errors = sandwich(
        sample.rule, predicted[:, None], bread, left[:, None], k + sample.counted, unit_free=False
    )
    error = float(np.sqrt(errors.covariance[0, 0]))
    reach = t_reach(level, degrees_of_freedom(sample.rule, k + sample.absorbed)[0])
    return Allowed(estimate, error, estimate - reach * error, estimate + reach * error)


def union_of_intervals(parts: Parts, low: Floats, high: Floats, level: float) -> ConfidenceSet:
    """Union of the intervals over every γ between ``low`` and ``high`` (L,) (CHR 2012, sec. 2.2).

    Without two-way clusters the ends of an interval are convex and concave in γ, so the corners
    decide exactly; with them a lattice of five values an instrument is gone through as well.

    Raises:
        InputProblem: ``violation_range`` if low exceeds high or there are too many corners.
    """
    found = [at_violation(parts, np.array(g), level) for g in _points(parts, low, high)]
    return ConfidenceSet(
        Shape.INTERVAL,
        min(item.low for item in found),
        max(item.high for item in found),
        level,
        "union of two-stage intervals over the violations allowed",
    )


def _points(parts: Parts, low: Floats, high: Floats, fewest: int = 2) -> list[tuple[float, ...]]:
    if len(low) != len(parts.instruments) or (low > high).any():
        raise refusal(
            "violation_range",
            "violations",
            f"from {low.tolist()} to {high.tolist()}",
            "a lower and an upper end for each instrument, in this order",
            "exchange the ends",
        )
    values = max(fewest, LATTICE if len(parts.sample.rule.clusters) > 1 else 2)
    if values ** len(low) > MOST_POINTS:
        raise refusal(
            "violation_range",
            "violations",
            f"{values ** len(low)} combinations",
            f"at most {MOST_POINTS}",
            "allow violations of fewer instruments",
        )
    return list(product(*(np.linspace(a, b, values) for a, b in zip(low, high, strict=True))))


@dataclass(frozen=True, slots=True, eq=False)
class ViolatedForms:
    """What the Anderson-Rubin test of y - Zγ is made of, for any γ (L,).

    The forms' covariance comes from residuals on the instruments, from which Zγ is gone, so γ
    only moves π_y, by ``moved`` (L, L) times γ in the forms' own basis.
    """

    forms: ReducedForms
    moved: Floats

    def at(self, gamma: Floats) -> ReducedForms:
        """The forms at one violation."""
        return replace(self.forms, outcome=self.forms.outcome - self.moved @ gamma)


def violated_forms(parts: Parts) -> ViolatedForms:
    """The forms that a fit's own Anderson-Rubin set inverts, and what a violation does to them."""
    forms = inverted_forms(parts)
    columns = [
        forms.outcome - inverted_forms(replace(parts, y=parts.y - z)).outcome for z in parts.Z.T
    ]
    return ViolatedForms(forms, np.column_stack(columns))


def union_of_anderson_rubin(
    parts: Parts, low: Floats, high: Floats, level: float, made: ViolatedForms | None = None
) -> ConfidenceSet:
    """Hull of the Anderson-Rubin sets of y - Zγ, which hold however weak the instruments.

    ``made`` are :func:`violated_forms` of the same parts, for callers that ask for many unions.

    One instrument: the corners are exact. Several: a lattice of five values each, so the hull is
    approximate. The line if any set is unbounded; empty sets are passed over.
    """
    forms = made or violated_forms(parts)
    points = _points(parts, low, high, 2 if len(low) == 1 else LATTICE)
    sets = [anderson_rubin_set(forms.at(np.array(g)), level) for g in points]
    method = "hull of Anderson-Rubin sets over the violations allowed"
    nan = float("nan")
    if any(item.shape in (Shape.RAYS, Shape.LINE) for item in sets):
        return ConfidenceSet(Shape.LINE, nan, nan, level, method)
    ends = [item for item in sets if item.shape is Shape.INTERVAL]
    if not ends:
        return ConfidenceSet(Shape.EMPTY, nan, nan, level, method)
    low_end, high_end = min(e.low for e in ends), max(e.high for e in ends)
    return ConfidenceSet(Shape.INTERVAL, low_end, high_end, level, method)


def local_to_zero(parts: Parts, mean: Floats, spread: Floats, level: float) -> Allowed:
    """Effect when γ is drawn from a normal of ``mean`` (L,) and covariance ``spread`` (L, L).

    α̂ - Aμ with variance V + AΩA', A = (D̂'D̂)⁻¹D̂'Z (Conley, Hansen and Rossi 2012, sec. 2.3).
    """
    base = at_violation(parts, np.zeros(len(mean)), level)
    predicted = parts.D - solve(parts.Z, parts.D)[1]
    A = predicted @ parts.Z / float(predicted @ predicted)
    estimate = base.estimate - float(A @ mean)
    error = float(np.sqrt(base.std_error**2 + A @ spread @ A))
    reach = (base.high - base.estimate) / base.std_error
    return Allowed(estimate, error, estimate - reach * error, estimate + reach * error)


def generated_instruments(
    design: Design, chosen: Sequence[str] = ()
) -> tuple[Floats, tuple[str, ...], TestResult]:
    """(n, q) instruments (Z_j - mean)·ê, ê the treatment's residual on the controls; names; a test.

    ``chosen`` are controls, all varying ones if empty. The test is Breusch and Pagan's of ê²
    on them: the instruments say nothing unless the variance moves (Lewbel 2012).

    Raises:
        InputProblem: ``benchmark_not_control`` for a name that is not a varying control.
    """
    at = design.names.index(design.treatment)
    controls = np.delete(design.X, at, axis=1)
    names = [name for name in design.names if name != design.treatment]
    varies = [name for name, x in zip(names, controls.T, strict=True) if np.ptp(x) > 0]
    for name in chosen:
        if name not in varies:
            raise refusal(
                "benchmark_not_control",
                name,
                "not a control that varies",
                f"one of {', '.join(varies)}",
                "name a control",
            )
    columns = [names.index(name) for name in (chosen or varies)]
    left = solve(controls, design.X[:, at])[1]
    Z = controls[:, columns]
    test = breusch_pagan(np.column_stack([np.ones(design.n), Z]), left)
    made = np.asarray((Z - Z.mean(axis=0)) * left[:, None], dtype=np.float64)
    null = "the variance of the choice does not move with the controls"
    labels = tuple(f"{name} × residual" for name in (chosen or varies))
    return made, labels, replace(test, null=null, citation=LEWBEL)


def heteroskedastic_instruments(
    design: Design, options: FitOptions, chosen: Sequence[str] = (), *, external: bool = False
) -> Estimate:
    """Two stages with instruments made from the controls and unequal variances (Lewbel 2012).

    Needs Cov(Z, ε₁ε₂) = 0, which a common confounder whose spread does not move with Z gives,
    and Cov(Z, ε₂²) ≠ 0, which the test ``heteroskedasticity`` looks at; the effective F and
    the overidentification test are those of the fit. ``external`` keeps the design's own
    instruments beside them. That ê is estimated does not change the covariance when the errors
    have mean zero given the controls. A supplement: instruments from outside are to be preferred.

    Raises:
        InputProblem: ``benchmark_not_control``, or as
            :func:`~pipeline.estimators.stages.parts_of`.
    """
    made, names, test = generated_instruments(design, chosen)
    own = external and bool(design.instruments)
    made = np.column_stack([design.Z, made]) if own else made
    column = two_stage_least_squares(
        replace(design, Z=made, instruments=(*design.instruments, *names) if own else names),
        options,
    )
    return replace(
        column,
        estimator="heteroskedastic_instruments",
        title="Instruments from unequal variances",
        tests={**column.tests, "heteroskedasticity": test},
        citation=LEWBEL,
        notes=(
            *column.notes,
            "The instruments are made from the controls; they hold if what moves choice and "
            "return together has a spread that does not change with the controls.",
        ),
    )
