"""The headline mean once more, each time with one choice made differently."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence

import numpy as np
import pandas as pd

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.ledger import Action, Ledger
from pipeline.core.reading import Reading
from pipeline.core.tables import typed_frame
from pipeline.core.window import Window
from pipeline.significance.dependence import links
from pipeline.significance.sample import CarSample, car_sample
from pipeline.significance.windows import mean_interval

TARGET = "mean reaction"
COLUMNS = {
    "target": "str",
    "dimension": "str",
    "variant": "str",
    "estimate": "float64",
    "ci_low": "float64",
    "ci_high": "float64",
    "n": "int64",
}
FLAGS = {
    "confounded": "without deals next to an earnings release",
    "other_news": "without deals next to other news",
    "amended_offer": "without second offers between the same companies",
    "overlapping_kept": "without deals that share a window with an earlier one",
    "time_unknown": "without deals whose time of day is unknown",
    "thin_trading": "without thinly traded shares",
    "benchmark_dominated": "without companies that are much of their benchmark",
}


def mean_variants(
    abnormal: Mapping[str, AbnormalReturns],
    window: Window,
    ledger: Ledger,
    level: float,
    readings: Sequence[Reading] = (),
) -> pd.DataFrame:
    """The mean CAR of ``window`` under each model, without each kind of flagged deal, and under
    each other reading of the events.

    Returns:
        ``target, dimension, variant, estimate, ci_low, ci_high, n``; decimal, the first model
        first.
    """
    rows = [
        _row("expected return", model.replace("_", " "), car_sample(item, window, 1.0), level)
        for model, item in abnormal.items()
    ]
    lead = next(iter(abnormal.values()))
    for variant, keep in _without(lead, ledger):
        some = links(lead).take(np.flatnonzero(keep))
        rows.append(_row("deals", variant, car_sample(lead.select(keep), window, 1.0, some), level))
    rows += [
        _row(reading.dimension, reading.words, car_sample(reading.abnormal, window, 1.0), level)
        for reading in readings
    ]
    return typed_frame(rows, COLUMNS)


def _without(lead: AbnormalReturns, ledger: Ledger) -> Iterator[tuple[str, np.ndarray]]:
    for rule, words in FLAGS.items():
        flagged = {
            entry.deal
            for _, entry in ledger
            if entry.rule == rule and entry.action is not Action.DROPPED
        }
        keep = np.array([deal not in flagged for deal in lead.deals])
        if 1 < keep.sum() < len(keep):
            yield words, keep


def _row(dimension: str, variant: str, sample: CarSample, level: float) -> dict[str, object]:
    low, high = mean_interval(sample, level)
    mean = float(sample.car.mean()) if sample.n else np.nan
    return {
        "target": TARGET,
        "dimension": dimension,
        "variant": variant,
        "estimate": mean,
        "ci_low": low,
        "ci_high": high,
        "n": sample.n,
    }
