"""Regressors recorded with error: what least squares would say of the true ones.

Error in the outcome is noise, not bias; error in a regressor pulls its coefficient toward zero and
pushes the others. All functions take the reliability (true over recorded variance), the error
variance or the misclassification rates as known.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from pipeline.core.estimate import t_reach
from pipeline.core.findings import InputProblem
from pipeline.core.prices import Floats
from pipeline.estimators.algebra import partial_out, refusal, solve
from pipeline.estimators.errors import of_influence
from pipeline.scrutiny.ground import Ground, row_sums

FULLER = "Fuller (1987)"
KLEPPER_LEAMER = "Klepper and Leamer (1984)"
AIGNER = "Aigner (1973)"


@dataclass(frozen=True, slots=True, eq=False)
class Corrected:
    """Coefficients (k,) and covariance (k, k) for the true regressors, in the ground's order."""

    names: tuple[str, ...]
    coefficients: Floats
    covariance: Floats
    df: float

    def term(self, name: str, level: float) -> tuple[float, float, float]:
        """Coefficient and interval of one name."""
        at = self.names.index(name)
        value = float(self.coefficients[at])
        half = t_reach(level, self.df) * float(np.sqrt(self.covariance[at, at]))
        return value, value - half, value + half


def error_variance(ground: Ground, name: str, reliability: float) -> float:
    """(1 - λ)·Var(x), the error variance of a regressor of reliability λ, in its unit squared.

    With fixed effects the variance is that within them, and so must the reliability be.

    Raises:
        InputProblem: ``reliability_range`` outside (0, 1]; ``reliability_variable``.
    """
    if name not in ground.sample.names:
        raise refusal(
            "reliability_variable",
            f"scrutiny.reliability.{name}",
            "not a regressor of this column",
            f"one of {', '.join(ground.sample.names)}",
            "name a regressor",
        )
    if not 0 < reliability <= 1:
        raise refusal(
            "reliability_range",
            f"scrutiny.reliability.{name}",
            f"{reliability:g}",
            "a share above 0 and at most 1",
            "give true over recorded variance, for example from two independent records",
        )
    x = ground.sample.X[:, ground.sample.names.index(name)]
    return (1 - reliability) * float(x.var())


def reliability_corrected(ground: Ground, reliability: Mapping[str, float]) -> Corrected:
    """(X'X - nΣ)⁻¹X'y, Σ diagonal with the error variances (Fuller 1987).

    The covariance is the sandwich of the stacked estimating equations: those of the coefficients,
    x(y - x'β) + Σβ, and those of the recorded variances that Σ is a share of. Same rule for the
    errors, small-sample factor and degrees of freedom as the least-squares fit.

    Raises:
        InputProblem: ``reliability_range``, ``reliability_variable``, or ``reliability_too_low``
            when the recorded regressors would vary less than their errors.
    """
    sample = ground.sample
    X, y, n = sample.X, sample.y, sample.n
    sigma = np.zeros(len(sample.names))
    for name, value in reliability.items():
        sigma[sample.names.index(name) if name in sample.names else 0] = error_variance(
            ground, name, value
        )
    moments = X.T @ X - n * np.diag(sigma)
    scale = np.sqrt(np.diag(X.T @ X))
    if np.linalg.eigvalsh(moments / np.outer(scale, scale))[0] <= 1e-10:
        raise refusal(
            "reliability_too_low",
            "scrutiny.reliability: " + ", ".join(reliability),
            "error variances that leave nothing of the regressors beside one another",
            "a reliability above the R² of the variable on the other regressors",
            f"raise it above {_least(ground, reliability):.2f}",
        )
    inverse = np.linalg.inv(moments)
    b = inverse @ (X.T @ y)
    scores = X * (y - X @ b)[:, None] + sigma * b
    centred = (X - X.mean(axis=0)) ** 2
    spread = centred.mean(axis=0)
    share = np.divide(sigma, spread, out=np.zeros_like(sigma), where=spread > 0)
    influence = (scores + share * b * (centred - spread)) @ inverse
    errors = of_influence(row_sums(ground.sample.rule), influence, len(b) + sample.counted)
    return Corrected(sample.names, b, errors.covariance, ground.robust_df)


def _least(ground: Ground, names: Mapping[str, float]) -> float:
    found = []
    for name in names:
        at = ground.sample.names.index(name)
        others = np.delete(ground.sample.X, at, axis=1)
        x = ground.sample.X[:, at]
        about = float(np.sum((x - x.mean()) ** 2))
        found.append(1 - float(np.sum(partial_out(x[:, None], others) ** 2)) / about)
    return max(found)


def attenuation(ground: Ground, name: str, reliability: float) -> float:
    """What is left of a coefficient: (λ - R²)/(1 - R²), R² of the recorded x on the others.

    Controls make it worse: the marginal reliability is right only without them (Bound, Brown
    and Mathiowetz 2001). Not positive when the error swamps the rest.
    """
    lost = _least(ground, {name: reliability})
    return (reliability - lost) / (1 - lost)


@dataclass(frozen=True, slots=True)
class Bounds:
    """Ends between which a coefficient must lie; infinite when the data do not bound it."""

    low: float
    high: float

    @property
    def bounded(self) -> bool:
        """Whether both ends are finite."""
        return bool(np.isfinite(self.low) and np.isfinite(self.high))


def reverse_bounds(ground: Ground, names: tuple[str, ...]) -> dict[str, Bounds]:
    """Bounds of each mismeasured regressor and of the treatment, for any error variances.

    With independent errors in outcome and the K ``names``, the K + 1 regressions, each variable
    in turn on the left and solved for the outcome, bound the coefficients by their hull if they
    agree in sign; if they do not, nothing does (Frisch 1934; Klepper and Leamer 1984). With one
    name: the direct and the reverse regression. Correctly measured regressors are partialled
    out; the treatment, if it is one of them, follows linearly from the others.
    """
    sample = ground.sample
    at = [sample.names.index(name) for name in names]
    exact = np.delete(sample.X, at, axis=1)
    left = partial_out(np.column_stack([sample.y, sample.X[:, at]]), exact)
    precision = np.linalg.inv(left.T @ left)
    regressions = -precision[:, 1:] / precision[:, :1]
    finite = bool(np.isfinite(regressions).all())
    agree = finite and bool((np.abs(np.sign(regressions).sum(axis=0)) == len(regressions)).all())
    found = {name: _hull(regressions[:, j], agree) for j, name in enumerate(names)}
    if ground.sample.names[ground.at] not in names:
        rest = [column for column in range(len(sample.names)) if column not in at]
        place = rest.index(ground.at)
        direct = solve(exact, np.column_stack([sample.y, sample.X[:, at]]))[0][place]
        found[sample.names[ground.at]] = _hull(direct[0] - regressions @ direct[1:], agree)
    return found


def _hull(values: Floats, bounded: bool) -> Bounds:
    if not bounded:
        return Bounds(float("-inf"), float("inf"))
    return Bounds(float(values.min()), float(values.max()))


def misclassified(
    ground: Ground, missed: float, false: float, level: float
) -> tuple[float, float, float]:
    """The effect of the true 0/1 treatment when some deals are recorded as the other kind.

    ``missed`` is P(recorded 0 | true 1), ``false`` is P(recorded 1 | true 0), the same whatever
    the outcome and the controls. With q = 1 - missed - false, Cov(recorded, true | x) is q times
    the true treatment's residual variance, so least squares is divided by
    q·Var(true | x)/Var(recorded | x), linear residual variances (Aigner 1973; Bollinger 1996).
    Rates are known; the interval allows for the sampling of everything else. Without effects.

    Returns:
        Effect and the ends of its interval at ``level``.

    Raises:
        InputProblem: ``treatment_not_binary``, or ``misclassification_range`` when the rates
            exceed what the recorded shares allow.
    """
    D, n = ground.D, ground.n
    _check_rates(ground, missed, false)
    m, q = float(D.mean()), 1 - missed - false
    left = partial_out(D[:, None], ground.W)[:, 0]
    r = float(left @ left) / n
    P = (m - false) / q
    v = P * (1 - P) - (m * (1 - m) - r) / q**2
    if v <= 0:
        raise _bad_rates(missed, false)
    b = ground.estimate
    value = b * r / (q * v)
    by_b, by_v = r / (q * v), -value / v
    by_r = b / (q * v) + by_v / q**2
    by_m = by_v * ((1 - 2 * P) / q - (1 - 2 * m) / q**2)
    e = solve(ground.sample.X, ground.y)[1]
    influence = by_b * left * e / (r * n) + (by_r * (left**2 - r) + by_m * (D - m)) / n
    spread = of_influence(
        row_sums(ground.sample.rule), influence[:, None], ground.sample.X.shape[1]
    )
    half = t_reach(level, ground.robust_df) * float(np.sqrt(spread.covariance[0, 0]))
    return value, value - half, value + half


def _check_rates(ground: Ground, missed: float, false: float) -> None:
    if set(np.unique(ground.D).tolist()) != {0.0, 1.0}:
        raise refusal(
            "treatment_not_binary",
            ground.sample.names[ground.at],
            "values other than 0 and 1",
            "a feature a deal has or has not",
            "give a reliability instead",
        )
    share = float(ground.D.mean())
    if min(missed, false) < 0 or missed + false >= 1 or false >= share or missed >= 1 - share:
        raise _bad_rates(missed, false)


def _bad_rates(missed: float, false: float) -> InputProblem:
    return refusal(
        "misclassification_range",
        "misclassified",
        f"{missed:g} missed and {false:g} false",
        "rates below the recorded shares, with something left of the choice",
        "give smaller rates",
    )


def rescaled(estimate: float, low: float, high: float, kept: float) -> tuple[float, float, float]:
    """Estimate and interval over ``kept``, the share of the full effect that was measured.

    A share w of announcements placed on days outside the window leaves 1 - w of the effect, if
    being misplaced is unrelated to the deal (common practice, no source).

    Raises:
        ValueError: unless 0 < kept ≤ 1.
    """
    if not 0 < kept <= 1:
        raise ValueError(f"kept must be in (0, 1]. Got {kept} instead.")
    return estimate / kept, low / kept, high / kept
