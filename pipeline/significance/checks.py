"""What a reader should know of the sample before trusting a test on it."""

from __future__ import annotations

import numpy as np
import pandas as pd
from scipy import stats

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.estimate import Diagnostic
from pipeline.core.window import Window
from pipeline.significance.power import detectable
from pipeline.significance.sample import CarSample, car_sample

SUBJECT = "Sample"
HOUSE = "common practice, no source"
MANY = 0.05


def sample_checks(
    abnormal: AbnormalReturns, window: Window, deals: pd.DataFrame
) -> tuple[Diagnostic, ...]:
    """Dependence, overlap, skewness, repeats, completion and power of the headline sample."""
    sample = car_sample(abnormal, window, 1.0)
    if sample.n < 2:
        return ()
    return (
        *_dependence(sample),
        _skewness(sample),
        _repeats(deals),
        *_completion(deals),
        _power(sample),
    )


def _dependence(sample: CarSample) -> tuple[Diagnostic, ...]:
    link = sample.dependence
    effective = link.effective_n(sample.n)
    return (
        Diagnostic(
            SUBJECT,
            "Mean correlation of abnormal returns",
            link.mean,
            f"below {2 * link.noise:.4f}, twice what independent deals would show, or fewer than "
            f"{100 * MANY:.0f}% of pairs overlapping",
            "warn" if link.mean > 2 * link.noise and link.overlapping >= MANY else "pass",
            "Matters only where windows overlap; the headline test allows for it.",
            "Kolari and Pynnönen 2010",
        ),
        Diagnostic(
            SUBJECT,
            "Pairs of deals whose windows overlap, share",
            link.overlapping,
            f"below {MANY}",
            "pass" if link.overlapping < MANY else "warn",
            "Overlapping deals share news of the same days.",
            HOUSE,
        ),
        Diagnostic(
            SUBJECT,
            "Deals that independent ones would be worth",
            effective,
            f"above half of {sample.n}",
            "pass" if effective > sample.n / 2 else "warn",
            "The interval of the mean is widened accordingly.",
            "Kolari and Pynnönen 2010",
        ),
    )


def _skewness(sample: CarSample) -> Diagnostic:
    skew = float(stats.skew(sample.scar))
    bad = abs(skew) > 1 and sample.n < 100
    return Diagnostic(
        SUBJECT,
        "Skewness of standardised returns",
        skew,
        "between −1 and 1, or 100 deals",
        "warn" if bad else "pass",
        "A t test of few skewed returns rejects at the wrong rate.",
        "Lyon, Barber and Tsai 1999",
    )


def _repeats(deals: pd.DataFrame) -> Diagnostic:
    share = float(deals["security"].duplicated(keep=False).mean())
    return Diagnostic(
        SUBJECT,
        "Deals of companies with several deals, share",
        share,
        "for information",
        "pass",
        "Errors of one company's deals are allowed to move together when clustered by company.",
        HOUSE,
    )


def _completion(deals: pd.DataFrame) -> tuple[Diagnostic, ...]:
    status = deals["status"].str.lower()
    if not (status != "").any():
        return ()
    share = float((status == "completed").mean())
    return (
        Diagnostic(
            SUBJECT,
            "Completed deals, share",
            share,
            "below 1",
            "warn" if share == 1 else "pass",
            "A list of completed deals alone knows what was not known at the announcement.",
            HOUSE,
        ),
    )


def _power(sample: CarSample) -> Diagnostic:
    spread = float(sample.car.std(ddof=1))
    smallest = detectable(spread, sample.n, sample.dependence)
    return Diagnostic(
        SUBJECT,
        "Smallest mean found four times in five, decimal",
        smallest,
        "for information",
        "pass" if np.isfinite(smallest) else "warn",
        "A true mean smaller than this is likely to look like nothing.",
        "Campbell, Lo and MacKinlay 1997, ch. 4.6",
    )
