"""A confounder nobody recorded: how strong it would have to be (Cinelli and Hazlett 2020).

Strength is two partial R²: the share of what the controls leave of the treatment, and of what
treatment and controls leave of the outcome, that the confounder explains. The identities hold for
the classical standard error only, whatever the errors are: a clustered t put in their place gives
another bias. So the classical error makes the bias here, and the robust one, scaled as the
classical would be, makes the significance.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from pipeline.core.estimate import t_reach
from pipeline.core.prices import Floats
from pipeline.core.scrutiny import Contour
from pipeline.estimators.algebra import refusal
from pipeline.scrutiny.ground import Ground, partial_r_squared, varying

CITATION = "Cinelli and Hazlett (2020)"


@dataclass(frozen=True, slots=True)
class Benchmark:
    """A confounder ``multiple`` times as strong as a control: its strength and what it leaves.

    ``possible`` is false when no confounder can be that strong; the other numbers are then NaN.
    ``capped`` says that the strength with the outcome came out above one and was set to one.
    """

    control: str
    multiple: float
    with_treatment: float
    with_outcome: float
    estimate: float
    ci_low: float
    ci_high: float
    possible: bool = True
    capped: bool = False


def treatment_share(t: float, df: float) -> float:
    """Partial R² of the treatment with the outcome, t²/(t² + df), t the classical statistic.

    It is also the extreme robustness value XRV: a confounder that explained all of the outcome's
    rest would need this partial R² with the treatment.
    """
    return t * t / (t * t + df)


def critical_reach(df: float, level: float, inflation: float = 1.0, robust_df: float = 0) -> float:
    """f* = t*/√(df - 1), what an adjusted t must exceed, divided by √(df - 1).

    ``inflation`` is robust over classical standard error; with it the reach is that of the robust
    interval, t* from ``robust_df``, if a confounder shrinks both errors alike.
    """
    return inflation * t_reach(level, robust_df or df - 1) / float(np.sqrt(df - 1))


def robustness_value(t: float, df: float, q: float = 1.0, reach: float = 0.0) -> float:
    """Smallest equal strength r of a confounder that takes away a share ``q`` of the estimate.

    With ``reach`` (see :func:`critical_reach`) zero, RV_q = (√(f⁴ + 4f²) - f²)/2, f = q|t|/√df
    (Cinelli and Hazlett 2020). Otherwise the strength that makes the reduced estimate
    lose significance, f less the reach in place of f. Where f·reach > 1 the worst
    confounder explains less of the outcome than of the treatment, and the value is
    (f² - reach²)/(1 + f²): maximise √(r_y r/(1 - r)) + reach·√((1 - r_y)/(1 - r)) over r_y.
    """
    f = q * abs(t) / float(np.sqrt(df))
    if f <= reach:
        return 0.0
    if f * reach > 1:
        return (f * f - reach * reach) / (1 + f * f)
    left = (f - reach) ** 2
    return float((np.sqrt(left * left + 4 * left) - left) / 2)


def extreme_robustness_value(t: float, df: float, q: float = 1.0, reach: float = 0.0) -> float:
    """Smallest partial R² with the treatment that suffices if the outcome's may be anything.

    (f² - reach²)/(1 + f²), f = q|t|/√df, zero if negative; t²/(t² + df) for q = 1, reach = 0
    (Cinelli and Hazlett 2022; maximised over r_y as in :func:`robustness_value`).
    """
    f = q * abs(t) / float(np.sqrt(df))
    return max(0.0, (f * f - reach * reach) / (1 + f * f))


def bias(classical: float, df: float, with_treatment: Floats, with_outcome: Floats) -> Floats:
    """Size of the bias, se·√df·√(r_y r_d/(1 - r_d)), shaped as the two strengths.

    Cinelli and Hazlett (2020); ``classical`` is the standard error under equal variances.
    """
    odds = with_outcome * with_treatment / (1 - with_treatment)
    return np.asarray(classical * np.sqrt(df) * np.sqrt(odds))


def adjusted_error(error: float, df: float, with_treatment: Floats, with_outcome: Floats) -> Floats:
    """Standard error with the confounder in: se·√((1 - r_y)/(1 - r_d)·df/(df - 1)).

    Cinelli and Hazlett (2020); exact for the classical ``error``.
    """
    odds = (1 - with_outcome) / (1 - with_treatment)
    return np.asarray(error * np.sqrt(odds * df / (df - 1)))


def adjusted_estimate(ground: Ground, with_treatment: Floats, with_outcome: Floats) -> Floats:
    """The effect with the confounder in, if it works against the estimate; may change sign."""
    size = bias(ground.classical, ground.df, with_treatment, with_outcome)
    return np.asarray(np.sign(ground.estimate) * (abs(ground.estimate) - size))


def benchmark(ground: Ground, control: str, multiple: float, level: float) -> Benchmark:
    """A confounder ``multiple`` times as strong as ``control`` with treatment and outcome.

    Cinelli and Hazlett (2020), formal benchmarks: k_D and k_Y are both ``multiple``. The interval
    uses the robust standard error, shrunk as the classical one would be.

    Raises:
        InputProblem: ``benchmark_not_control``.
    """
    if control not in varying(ground):
        raise refusal(
            "benchmark_not_control",
            "scrutiny.benchmarks",
            f"'{control}', which is not a control of this column",
            f"one of {', '.join(varying(ground))}",
            "name a control, or add it to the controls",
        )
    d, y, raw = _strength(ground, control, multiple)
    if not d < 1:
        nan = float("nan")
        return Benchmark(control, multiple, nan, nan, nan, nan, nan, possible=False)
    at = np.array([d]), np.array([y])
    value = float(adjusted_estimate(ground, *at)[0])
    error = float(adjusted_error(ground.robust, ground.df, *at)[0])
    half = t_reach(level, ground.robust_df) * error
    return Benchmark(
        control, multiple, d, y, value, value - half, value + half, capped=bool(raw > 1)
    )


def _strength(ground: Ground, control: str, multiple: float) -> tuple[float, float, float]:
    """Partial R² with treatment and outcome, and the latter before it is capped at one.

    The first is infinite where no confounder can be that strong.
    """
    column = ground.names.index(control)
    x, others = ground.W[:, column], np.delete(ground.W, column, axis=1)
    r_d = partial_r_squared(ground.D, x, others)
    r_y = partial_r_squared(ground.y, x, np.column_stack([ground.D, others]))
    d = multiple * r_d / (1 - r_d)
    cross = multiple * r_d**2 / ((1 - multiple * r_d) * (1 - r_d)) if multiple * r_d < 1 else 1.0
    if not (d < 1 and cross < 1):
        return float("inf"), float("nan"), float("nan")
    raw = ((np.sqrt(multiple) + np.sqrt(cross)) / np.sqrt(1 - cross)) ** 2 * r_y / (1 - r_y)
    return d, min(float(raw), 1.0), float(raw)


def contour(ground: Ground, benchmarks: Sequence[Benchmark], points: int = 41) -> Contour:
    """Adjusted effect and t over a square of strengths that holds every possible benchmark."""
    strengths = [max(b.with_treatment, b.with_outcome) for b in benchmarks if b.possible]
    value = robustness_value(ground.estimate / ground.classical, ground.df)
    top = min(0.95, max(0.1, 1.3 * value, *(1.1 * s for s in strengths)))
    axis = np.linspace(0, top, points)
    d, y = np.meshgrid(axis, axis)
    estimates = adjusted_estimate(ground, d, y)
    return Contour(
        with_treatment=axis,
        with_outcome=axis,
        estimates=estimates,
        statistics=estimates / adjusted_error(ground.robust, ground.df, d, y),
        points={
            f"{b.multiple:g} × {b.control}": (b.with_treatment, b.with_outcome, b.estimate)
            for b in benchmarks
            if b.possible
        },
    )
