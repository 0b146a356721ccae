"""Whether a test holds in this very sample: what it assumes against what the sample shows."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

import numpy as np
from scipy import special

from pipeline.significance.sample import CarSample

# A design effect of 1.2 turns a nominal 5% into about 7%: measured, see tests/benchmarks.
DESIGN_EFFECT = 1.2
SKEWED = 0.5
SIZE = 0.01


def independent(sample: CarSample) -> str:
    """Why deals are not independent here, or ''.

    What counts is the correlation of deals whose windows meet: it must stand clear of its noise,
    and be worth many deals. Deals that never meet may be alike or opposed without harm.
    """
    link = sample.dependence
    if sample.n < 2 or not link.weighted > 2 * link.weighted_noise:
        return ""
    worth = link.effective_n(sample.n)
    if sample.n / worth < DESIGN_EFFECT:
        return ""
    return f"{sample.n} deals move together and are worth {worth:.0f} independent ones"


def aligned(sample: CarSample) -> str:
    """Why dependence reaches beyond deals of one date here, or ''.

    Daily series, and dates drawn whole, carry the dependence of deals that share all their days;
    deals whose windows overlap in part escape them.
    """
    return independent(sample) if sample.dependence.dates > 1 else ""


def constant_variance(sample: CarSample) -> str:
    """Why the variance at the event is not that of the estimation window, or ''.

    (n - 1) times the variance of the SCARs over its value without event-induced variance, mean
    (M - d) / (M - d - 2), against chi-squared at 1% (Boehmer, Musumeci and Poulsen 1991, sec. 2).
    """
    if sample.n < 2 or (sample.df <= 2).any():
        return ""
    ratio = float(sample.scar.var(ddof=1) / np.mean(sample.df / (sample.df - 2)))
    p = float(special.chdtrc(sample.n - 1, (sample.n - 1) * ratio))
    return f"the variance is {ratio:.1f} times that before" if p < SIZE else ""


def symmetric(sample: CarSample) -> str:
    """Why returns are not symmetric here, or ''."""
    if sample.n < 8:
        return ""
    from scipy import stats  # takes half a second to load

    skew = float(stats.skew(sample.scar))
    noise = float(np.sqrt(6 / sample.n))
    if abs(skew) < max(SKEWED, 2 * noise):
        return ""
    return f"standardised returns are skewed ({skew:.1f})"


def symmetric_before(sample: CarSample) -> str:
    """Why daily returns of the estimation windows are not symmetric, or ''.

    Matters when one cumulated return is ranked among daily ones, and the window has several days.
    """
    return "" if len(sample.window) == 1 else symmetric_daily(sample)


def symmetric_daily(sample: CarSample) -> str:
    """Why daily returns of the estimation windows are not symmetric, or ''.

    Matters in any window when returns of the event are scaled before they are ranked.
    """
    if sample.series is None:
        return ""
    standardised = sample.series.estimation / sample.series.residual_sd[:, None]
    values = standardised[np.isfinite(standardised)]
    if not len(values):
        return ""
    values -= values.mean()
    squares = values * values
    skew = float(np.vdot(squares, values) / len(values) / squares.mean() ** 1.5)
    return f"daily returns are skewed ({skew:.1f})" if abs(skew) > SKEWED else ""


def several_dates(sample: CarSample) -> str:
    """Why a series of dates carries no information on dependence, or ''."""
    if sample.n < 2 or sample.dependence.dates == 1:
        return ""
    return f"deals lie on {sample.dependence.dates} dates, so one series mixes calendar days"


CHECKS: dict[str, Callable[[CarSample], str]] = {
    "independent": independent,
    "aligned": aligned,
    "constant_variance": constant_variance,
    "symmetric": symmetric,
    "symmetric_before": symmetric_before,
    "symmetric_daily": symmetric_daily,
    "one_date": several_dates,
}


@dataclass(frozen=True, slots=True)
class Reasons:
    """What speaks against assumptions in one sample; each is looked at once."""

    sample: CarSample
    known: dict[str, str] = field(default_factory=dict)

    def against(self, assumes: Sequence[str]) -> str:
        """Why a test with these assumptions does not hold in the sample; '' if it does."""
        for name in assumes:
            if name not in self.known:
                self.known[name] = CHECKS[name](self.sample)
        return "; ".join(self.known[name] for name in assumes if self.known[name])
