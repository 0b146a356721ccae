"""How often a test finds an effect of a given size, and the smallest effect it finds."""

from __future__ import annotations

import numpy as np
import pandas as pd
from scipy import special

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.window import Window
from pipeline.significance.dependence import Dependence
from pipeline.significance.sample import car_sample

EFFECTS = np.array([5, 10, 15, 20, 25, 30, 40, 50, 60, 80, 100, 125, 150, 200, 250, 300]) / 1e4
POWER = 0.8


def z_test_power(effect: float, std_dev: float, n: float, size: float = 0.05) -> float:
    """Power of the two-sided z test of a zero mean.

    Phi(-z - d) + 1 - Phi(z - d) with d = effect sqrt(n) / std_dev (Campbell, Lo and MacKinlay
    1997, ch. 4.6).

    Args:
        effect: true mean, decimal.
        std_dev: of one deal's abnormal return, decimal.
        n: deals, or what dependent ones are worth.
        size: nominal level.
    """
    reach = -float(special.ndtri(size / 2))
    shift = effect * np.sqrt(n) / std_dev
    return float(special.ndtr(-reach - shift) + special.ndtr(shift - reach))


def detectable(
    std_dev: float, n: int, link: Dependence, size: float = 0.05, power: float = 0.8
) -> float:
    """Smallest mean, decimal, that a two-sided z test finds with the given power.

    (z_(1-size/2) + z_power) s / sqrt(effective n); 2.8 s / sqrt(n) at the usual 5% and 80%.
    """
    reach = -float(special.ndtri(size / 2)) + float(special.ndtri(power))
    return reach * std_dev / float(np.sqrt(link.effective_n(n)))


def power_frame(std_dev: float, n: int, link: Dependence, size: float = 0.05) -> pd.DataFrame:
    """Power over effects, and the deals each effect needs for power of four fifths.

    n deals whose correlation is r on average are worth n / (1 + (n - 1) r), never more than 1 / r.
    So many are needed as are worth the N = ((z_(1-size/2) + z_.8) s / effect)² independent ones:
    N (1 - r) / (1 - N r), or no number of them where N r ≥ 1.

    Args:
        std_dev: cross-sectional standard deviation of the CARs, decimal.
        n: deals of the sample.
        link: their dependence; deals to be added are taken to be as dependent as these.
        size: nominal level.

    Returns:
        ``effect`` (decimal), ``power`` with the sample's deals, ``deals_needed`` for power 0.8,
        infinite where no number is enough.
    """
    effects = EFFECTS
    worth = link.effective_n(n)
    reach = -float(special.ndtri(size / 2)) + float(special.ndtri(POWER))
    independent = np.nan_to_num((reach * std_dev / effects) ** 2)
    return pd.DataFrame(
        {
            "effect": effects,
            "power": [z_test_power(float(e), std_dev, worth, size) for e in effects],
            "deals_needed": [_deals_worth(float(count), link) for count in independent],
        }
    )


def _deals_worth(worth: float, link: Dependence) -> float:
    """Fewest deals, as dependent as these, that are worth so many independent ones."""
    r = max(link.weighted, 0.0)
    if worth * r >= 1:
        return np.inf
    return float(np.ceil(worth * (1 - r) / (1 - worth * r)))


def detectable_of(abnormal: AbnormalReturns, window: Window, size: float = 0.05) -> float:
    """:func:`detectable` at power 0.8 of the deals that traded on every day; NaN below two."""
    sample = car_sample(abnormal, window, 1.0)
    if sample.n < 2:
        return np.nan
    spread = float(sample.car.std(ddof=1))
    return detectable(spread, sample.n, sample.dependence, size, POWER)


def power_of(abnormal: AbnormalReturns, window: Window, size: float = 0.05) -> pd.DataFrame:
    """:func:`power_frame` of the deals that traded on every day of ``window``."""
    sample = car_sample(abnormal, window, 1.0)
    if sample.n < 2:
        return power_frame(np.nan, max(sample.n, 1), sample.dependence, size).iloc[:0]
    return power_frame(float(sample.car.std(ddof=1)), sample.n, sample.dependence, size)
