"""How often a test finds an effect of a given size, and the smallest effect it finds."""

from __future__ import annotations

import numpy as np
from scipy import special

from pipeline.significance.dependence import Dependence


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
