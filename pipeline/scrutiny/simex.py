"""Simulation and extrapolation: add more error, watch the effect shrink, run the film backwards.

Cook and Stefanski (1994); standard errors by Stefanski and Cook (1995).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import optimize

from pipeline.core.estimate import EstimationFailed, t_reach
from pipeline.core.prices import Floats
from pipeline.estimators.algebra import solve
from pipeline.estimators.errors import of_influence
from pipeline.scrutiny.ground import Ground, row_sums
from pipeline.scrutiny.mismeasured import error_variance

CITATION = "Cook and Stefanski (1994); Stefanski and Cook (1995)"
ZETA = (0.5, 1.0, 1.5, 2.0)
EXTRAPOLANTS = ("linear", "quadratic", "rational")


@dataclass(frozen=True, slots=True, eq=False)
class Simex:
    """The film and its beginning.

    Attributes:
        zeta: (m,) added error variance over the error's own, 0 first.
        path: (m,) mean coefficient of the treatment at each.
        variances: (m,) what is extrapolated for the standard error.
        estimates, std_errors: extrapolant -> value at -1; NaN if its variance came out negative.
        df: degrees of freedom of t.
    """

    zeta: Floats
    path: Floats
    variances: Floats
    estimates: dict[str, float]
    std_errors: dict[str, float]
    df: float

    def interval(self, extrapolant: str, level: float) -> tuple[float, float]:
        """The t interval of one extrapolant."""
        half = t_reach(level, self.df) * self.std_errors[extrapolant]
        return self.estimates[extrapolant] - half, self.estimates[extrapolant] + half


def simex(ground: Ground, name: str, reliability: float, *, seed: int, draws: int = 200) -> Simex:
    """The treatment's effect were the regressor ``name`` recorded without error.

    At each ζ of .5, 1, 1.5, 2 normal error of variance ζσ², σ² = (1 - λ)Var(x), is added
    ``draws`` times, and the mean coefficient is extrapolated to ζ = -1. The same draws serve
    every ζ. The variance at ζ is the mean sandwich variance less the variance between draws
    (Stefanski and Cook 1995), extrapolated likewise: an approximation, in simulations a tenth
    too small by the quadratic and a tenth too large by the rational curve.

    Raises:
        InputProblem: ``reliability_range`` or ``reliability_variable``.
        EstimationFailed: if the rational curve cannot be fitted.
    """
    sample = ground.sample
    deviation = float(np.sqrt(error_variance(ground, name, reliability)))
    column = sample.names.index(name)
    noise = np.random.default_rng(seed).normal(size=(draws, sample.n)) * deviation
    noise -= noise.mean(axis=1, keepdims=True)
    values, spreads = [], []
    for zeta in (0.0, *ZETA):
        fits = [_refit(ground, column, np.sqrt(zeta) * u) for u in (noise if zeta else noise[:1])]
        found = np.array(fits)
        values.append(float(found[:, 0].mean()))
        between = float(found[:, 0].var(ddof=1)) if zeta else 0.0
        spreads.append(float(found[:, 1].mean()) - between)
    zetas, path, variances = np.array([0.0, *ZETA]), np.array(values), np.array(spreads)
    estimates = {kind: extrapolated(zetas, path, kind) for kind in EXTRAPOLANTS}
    squares = {kind: extrapolated(zetas, variances, kind) for kind in EXTRAPOLANTS}
    errors = {k: float(np.sqrt(v)) if v > 0 else float("nan") for k, v in squares.items()}
    return Simex(zetas, path, variances, estimates, errors, ground.robust_df)


def _refit(ground: Ground, column: int, noise: Floats) -> tuple[float, float]:
    """Coefficient of the treatment and its variance with ``noise`` (n,) added to one column."""
    sample, at = ground.sample, ground.at
    X = sample.X.copy()
    X[:, column] += noise
    # Normal equations: hundreds of refits of one well-scaled problem, checked at noise zero.
    bread = np.linalg.inv(X.T @ X)
    b = bread @ (X.T @ sample.y)
    influence = (X @ bread[:, at]) * (sample.y - X @ b)
    return float(b[at]), _variance(ground, influence)


def _variance(ground: Ground, influence: Floats) -> float:
    sample = ground.sample
    k = sample.X.shape[1] + sample.counted
    return float(of_influence(row_sums(sample.rule), influence[:, None], k).covariance[0, 0])


def extrapolated(zeta: Floats, values: Floats, kind: str) -> float:
    """``values`` (m,) at ``zeta`` (m,) carried to -1; see :func:`curve`."""
    return float(curve(zeta, values, kind, np.array([-1.0]))[0])


def curve(zeta: Floats, values: Floats, kind: str, at: Floats) -> Floats:
    """A curve through ``values`` (m,) at ``zeta`` (m,), read at ``at`` (p,), all at least -1.

    ``linear``, ``quadratic`` or ``rational``, a + b/(c + ζ) (Carroll, Ruppert, Stefanski and
    Crainiceanu 2006, sec. 5.3.2).

    Raises:
        EstimationFailed: if the search for the rational curve's pole left of -1 fails.
    """
    if kind != "rational":
        degree = 1 if kind == "linear" else 2
        coefficients = solve(np.vander(zeta, degree + 1, increasing=True), values)[0]
        return np.asarray(np.vander(at, degree + 1, increasing=True) @ coefficients)
    size = float(np.abs(values).max())
    if size == 0 or float(np.ptp(values)) <= 1e-9 * size:
        return np.full(len(at), float(values.mean()))
    gap = _pole(zeta, values / size)
    a, b = _misfit(zeta, values / size, gap)[1]
    return np.asarray(size * (a + b / (1 + np.exp(gap) + at)))


def _misfit(zeta: Floats, scaled: Floats, log_gap: float) -> tuple[float, Floats]:
    """Sum of squares and coefficients (a, b) with the pole at -1 - exp(``log_gap``)."""
    basis = np.column_stack([np.ones_like(zeta), 1 / (1 + np.exp(log_gap) + zeta)])
    coefficients = np.linalg.lstsq(basis, scaled, rcond=None)[0]
    left = scaled - basis @ coefficients
    return float(left @ left), coefficients


def _pole(zeta: Floats, scaled: Floats) -> float:
    """For each pole left of -1 the rest is linear: one dimension is left to search."""
    grid = np.linspace(-6, 6, 49)
    best = grid[int(np.argmin([_misfit(zeta, scaled, float(g))[0] for g in grid]))]
    found = optimize.minimize_scalar(
        lambda g: _misfit(zeta, scaled, g)[0], bounds=(best - 0.25, best + 0.25), method="bounded"
    )
    if not found.success:
        raise EstimationFailed("the rational curve of the extrapolation could not be fitted")
    return float(found.x)
