"""What a test of the mean abnormal return may see."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.prices import Floats, Integers
from pipeline.core.window import Window
from pipeline.significance.dependence import Dependence, Links, dependence


@dataclass(frozen=True, slots=True, eq=False)
class CarSample:
    """CARs of n deals in one window under one model.

    Attributes:
        window: the window.
        car: (n,) decimal.
        scar: (n,) standardised by the forecast-error standard deviation.
        std_dev: (n,) that standard deviation.
        df: (n,) M - d of each estimation window.
        dependence: correlation and overlap among the deals.
    """

    window: Window
    car: Floats
    scar: Floats
    std_dev: Floats
    df: Integers
    dependence: Dependence

    @property
    def n(self) -> int:
        """Deals."""
        return len(self.car)


def car_sample(
    abnormal: AbnormalReturns, window: Window, share_of_days: float, known: Links | None = None
) -> CarSample:
    """The deals that traded on enough days of ``window``, as a sample.

    ``known`` are the links of all deals of ``abnormal``, if they were made before.
    """
    rows = np.flatnonzero(abnormal.complete(window, share_of_days))
    kept = abnormal.take(rows)
    link = dependence(kept, window, known.take(rows) if known else None)
    std_dev = np.sqrt(kept.car_variance(window))
    car = kept.car(window)
    return CarSample(window, car, car / std_dev, std_dev, kept.degrees_of_freedom, link)
