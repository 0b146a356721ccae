"""Columns that a handful of extreme outcomes cannot carry: median regression and Huber's."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy import optimize, special

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import Estimate, EstimationFailed
from pipeline.core.prices import Floats
from pipeline.estimators import diagnostics
from pipeline.estimators.algebra import partial_out, refuse_dependent, scaled, solve
from pipeline.estimators.errors import (
    Sandwich,
    cautions,
    choose_errors,
    degrees_of_freedom,
    factor,
    of_influence,
    positive,
    words,
)
from pipeline.estimators.sample import Sample, plain

SUPPORTED = ("classical", "hc0", "hc1")
MEDIAN = "Koenker and Bassett (1978); Powell (1991); Parente and Santos Silva (2016)"
HUBER = "Huber (1973); MacKinnon and White (1985)"
TUNING = 1.345
"""Huber's constant: 95% efficient under normal errors (Holland and Welsch 1977)."""
CONSISTENT = float(special.ndtri(0.75))
CONVERGED = 1e-12
MOST_ITERATIONS = 500
FREE = 1e-6


@dataclass(frozen=True, slots=True, eq=False)
class Robust:
    """Coefficients (k,), residuals (n,), errors, and what is to be recorded."""

    coefficients: Floats
    errors: Sandwich
    facts: dict[str, float]
    notes: tuple[str, ...] = ()


def median(design: Design, options: FitOptions) -> Estimate:
    """Least absolute deviations: the median outcome given the treatment and the controls.

    X (n, k), outcome decimal. The minimum is found exactly, as a vertex of the linear program,
    so that it depends neither on the order of rows nor on units; on a flat stretch of minima one
    end is given. Influence rows H⁻¹x_i(½ - 1(e_i < 0)), the k rows fitted exactly taking the
    weights in [-½, ½] that balance the sum (Koenker and Bassett 1978), H = Σ 1(|e| ≤ c)xx'/2c
    (Powell 1991) with c from the Hall and Sheather (1988) bandwidth and a robust spread. HC1 by
    default, clustered if the options ask (Parente and Santos Silva 2016); ``classical`` is
    s²(X'X)⁻¹/4 with s the sparsity at zero by the same kernel. df: n - k, or G - 1.

    ``fit``: bandwidth (c), pseudo_r_squared (1 less absolute deviations over those about the
    median, Koenker and Machado 1999), least_squares, condition_number, small_sample_factor.

    Raises:
        InputProblem: ``few_rows``, ``collinear``, ``no_variation``, or a problem of clusters or
            covariance.
        EstimationFailed: if the program is not solved or too few returns lie near the fit.
    """
    return _column(
        design,
        options,
        _median,
        estimator="median",
        title="Median regression",
        estimand=f"difference in median {design.outcome} associated with {design.treatment}, "
        "holding the controls fixed",
        citation=MEDIAN,
    )


def huber(design: Design, options: FitOptions) -> Estimate:
    """Huber's M-estimate: squares near the fit, absolute values beyond 1.345 spreads.

    X (n, k), outcome decimal. Iterated weights and spread, the median of |e| over .6745, until
    neither moves (Huber 1973; constant of Holland and Welsch 1977). Influence rows
    s·H⁻¹x_iψ(e_i/s), H = Σ 1(|e| ≤ 1.345 s)xx', the spread taken as known, which is harmless when
    errors are symmetric. HC1 by default, clustered if the options ask; ``classical`` is Huber's
    (1973) own s²K²Σψ²/(n - k)/m²·(X'X)⁻¹ with m the share within reach. df: n - k, or G - 1.

    ``fit``: spread (s), downweighted (share of deals beyond reach), least_squares,
    condition_number, small_sample_factor.

    Raises:
        InputProblem: as :func:`median`.
        EstimationFailed: if the iterations do not settle, or more than half of the deals are
            fitted exactly, which leaves no spread.
    """
    return _column(
        design,
        options,
        _huber,
        estimator="huber",
        title="Huber regression",
        estimand=f"difference in {design.outcome} associated with {design.treatment} in the bulk "
        "of the deals, holding the controls fixed, extreme outcomes counting for less",
        citation=HUBER,
    )


def _column(
    design: Design,
    options: FitOptions,
    solver: Callable[[Sample, str], Robust],
    *,
    estimator: str,
    title: str,
    estimand: str,
    citation: str,
) -> Estimate:
    rule = choose_errors(design.clusters, design.n, options, otherwise="hc1", supported=SUPPORTED)
    sample = plain(design, rule)
    refuse_dependent(sample.X, sample.names)
    found = solver(sample, design.outcome)
    k = len(sample.names)
    df, sentence = degrees_of_freedom(rule, k)
    return Estimate(
        estimator=estimator,
        title=title,
        estimand=estimand,
        citation=citation,
        names=sample.names,
        coefficients=found.coefficients,
        covariance=positive(found.errors.covariance, sample.names),
        df=df,
        df_rule=sentence,
        covariance_name=words(rule),
        n=sample.n,
        treatment=design.treatment,
        outcome=design.outcome,
        clusters=rule.counts,
        fit=_facts(design, sample, found),
        scores=found.errors.influence,
        notes=(*sample.notes, *cautions(rule, found.errors.floored), *found.notes),
        level=options.level,
    )


def _facts(design: Design, sample: Sample, found: Robust) -> dict[str, float]:
    least = solve(sample.X, sample.y)[0][sample.names.index(design.treatment)]
    facts = {
        **found.facts,
        "least_squares": float(least),
        "condition_number": diagnostics.condition_number(sample.X),
        "small_sample_factor": factor(sample.rule, len(sample.names)),
    }
    return {name: value for name, value in facts.items() if not np.isnan(value)}


def _median(sample: Sample, outcome: str) -> Robust:
    X, length = scaled(sample.X)
    b, e, signs = least_absolute(X, sample.y)
    n, k = X.shape
    c = _bandwidth(e)
    near = np.maximum(0.75 * (1 - (e / c) ** 2), 0.0) / c
    H = (X * near[:, None]).T @ X
    influence = np.asarray((X * (signs / 2)[:, None]) @ np.linalg.inv(H))
    if sample.rule.kind == "classical":
        sparsity = n / float(near.sum())
        V = np.linalg.inv(X.T @ X) * sparsity**2 / 4
        errors = Sandwich(np.asarray(V), influence)
    else:
        errors = of_influence(sample.rule, influence, k)
    around = float(np.abs(sample.y - np.median(sample.y)).sum())
    facts = {"bandwidth": c, "pseudo_r_squared": 1 - float(np.abs(e).sum()) / around}
    notes: tuple[str, ...] = ()
    fitted = int((e == 0).sum())
    if fitted > k:
        notes = (
            f"{fitted} deals are fitted exactly, more than the {k} coefficients: the median of "
            f"{outcome} may not be a single value.",
        )
    return Robust(b / length, _in_units(errors, length), facts, notes)


def least_absolute(X: Floats, y: Floats) -> tuple[Floats, Floats, Floats]:
    """Least absolute deviations of y (n,) on X (n, k) of full rank, columns of unit length.

    The dual program max a'y, X'a = 0, |a| ≤ 1 has one row a coefficient (Koenker and Bassett
    1978); rows strictly inside the bounds are fitted exactly and give the coefficients.

    Returns:
        coefficients (k,), residuals (n,) with exact zeros where the fit passes through, and the
        dual weights (n,), the residuals' signs elsewhere, X'a = 0 to rounding.

    Raises:
        EstimationFailed: if the program is not solved, or all but nothing is left of y.
    """
    n, k = X.shape
    unit = partial_out(y[:, None], X)[:, 0]
    size = float(np.abs(unit).mean())
    if not size > 1e-12 * float(np.abs(y).mean()):
        raise EstimationFailed("the regressors fit the outcome exactly: no error is left")
    program = optimize.linprog(
        -unit / size, A_eq=X.T * np.sqrt(n), b_eq=np.zeros(k), bounds=(-1, 1), method="highs-ds"
    )
    if program.status != 0:
        raise EstimationFailed(f"the median was not found: {program.message}")
    rough = unit / size + X @ (program.eqlin.marginals * np.sqrt(n))
    through = np.abs(rough) <= FREE
    b, _, rank, _ = np.linalg.lstsq(X[through], y[through], rcond=None)
    if rank < k:
        raise EstimationFailed("the median was not found: too few deals lie on the fit")
    e = np.where(through, 0.0, y - X @ b)
    if float(np.abs(y - X @ b)[through].max()) > 1e-6 * size:
        raise EstimationFailed("the median was not found: the fit misses its own deals")
    a = np.sign(e)
    a[through] = np.linalg.lstsq(X[through].T, -(X[~through].T @ a[~through]), rcond=None)[0]
    return np.asarray(b), np.asarray(e), np.asarray(a)


def _bandwidth(e: Floats) -> float:
    """Half-width of the kernel about zero, in the residuals' unit.

    Hall and Sheather (1988) at the median for a 95% interval, carried to the residuals by a
    normal scale, the smaller of standard deviation and quartile range over 1.34.
    """
    n = len(e)
    density = 1 / np.sqrt(2 * np.pi)
    z = float(-special.ndtri(0.025))
    h = min(n ** (-1 / 3) * z ** (2 / 3) * (1.5 * density**2) ** (1 / 3), 0.45)
    low, high = np.percentile(e, [25, 75])
    spread = min(float(e.std()), float(high - low) / 1.34)
    if not spread > 0:
        raise EstimationFailed("half of the deals are fitted exactly: no spread is left")
    return float(spread * 2 * special.ndtri(0.5 + h))


def _huber(sample: Sample, outcome: str) -> Robust:
    X, length = scaled(sample.X)
    y = sample.y
    n, k = X.shape
    b, e, _ = solve(X, y)
    spread = _spread(e, y)
    for _ in range(MOST_ITERATIONS):
        weight = np.minimum(1.0, TUNING * spread / np.maximum(np.abs(e), 1e-300))
        root = np.sqrt(weight)
        new = solve(X * root[:, None], y * root)[0]
        moved = float(np.abs(X @ (new - b)).max())
        b, e = new, y - X @ new
        spread = _spread(e, y)
        if moved <= CONVERGED * spread:
            break
    else:
        raise EstimationFailed(f"Huber's weights did not settle in {MOST_ITERATIONS} rounds")
    inside = np.abs(e) <= TUNING * spread
    psi = np.clip(e, -TUNING * spread, TUNING * spread)
    m = float(inside.mean())
    bread = np.linalg.inv((X * inside[:, None]).T @ X)
    influence = np.asarray((X * psi[:, None]) @ bread)
    if sample.rule.kind == "classical":
        correction = 1 + k / n * (1 - m) / m
        scale = correction**2 * float(psi @ psi) / (n - k) / m**2
        errors = Sandwich(np.asarray(scale * np.linalg.inv(X.T @ X)), influence)
    else:
        errors = of_influence(sample.rule, influence, k)
    facts = {"spread": spread, "downweighted": 1 - m}
    return Robust(b / length, _in_units(errors, length), facts)


def _spread(e: Floats, y: Floats) -> float:
    spread = float(np.median(np.abs(e))) / CONSISTENT
    if not spread > 1e-12 * float(np.abs(y).max()):
        raise EstimationFailed("half of the deals are fitted exactly: no spread is left")
    return spread


def _in_units(errors: Sandwich, length: Floats) -> Sandwich:
    """The errors of coefficients of unit-length columns carried to the columns' own units."""
    return Sandwich(
        np.asarray(errors.covariance / np.outer(length, length)),
        np.asarray(errors.influence / length),
        errors.floored,
    )
