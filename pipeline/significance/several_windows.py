"""What it costs to look at several windows: one resample of dates serves them all."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.multiplicity import adjusted, resampled_p
from pipeline.core.prices import Dates, Floats
from pipeline.core.tables import typed_frame
from pipeline.core.window import Window

DRAWS = 1999
FEWEST_DATES = 6
ROUNDING = 1e-12
COLUMNS = {
    "window_start": "int64",
    "window_end": "int64",
    "expected_return": "str",
    "declared": "str",
    "n": "int64",
    "dates": "int64",
    "mean": "float64",
    "statistic": "float64",
    "p_value": "float64",
    "p_holm": "float64",
    "q_value": "float64",
    "p_romano_wolf": "float64",
    "draws": "int64",
}


@dataclass(frozen=True, slots=True, eq=False)
class Family:
    """The t of the mean in each of S windows, and B resamples of all of them under the null.

    Attributes:
        n: (S,) deals of each window; ``dates`` (S,) their dates.
        mean: (S,) mean CAR, decimal.
        statistic: (S,) t of the mean, its error clustered by date.
        resampled: (B, S) t about the sample's own mean, one row from one draw of dates.
    """

    n: tuple[int, ...]
    dates: tuple[int, ...]
    mean: Floats
    statistic: Floats
    resampled: Floats


def several_windows(
    abnormal: Mapping[str, AbnormalReturns],
    windows: Sequence[Window],
    share_of_days: float,
    seed: int,
    draws: int = DRAWS,
) -> pd.DataFrame:
    """p-values of every window, those of the secondary ones also adjusted for their number.

    The statistic is the t of the mean CAR with an error clustered by date. Its distribution comes
    from ``draws`` resamples of whole dates with all their deals, the same dates for all windows,
    each about the sample's own mean so that the null holds (Romano and Wolf 2005, Econometrica 73;
    Cameron, Gelbach and Miller 2008, REStat 90). Beside the step-down p stand Holm's and the
    false-discovery q of Benjamini and Hochberg (1995). The first window was declared before
    looking and pays for none.

    Returns:
        One row a model and window; NaN where fewer than six dates leave nothing to resample.
    """
    rows: list[dict[str, object]] = []
    for model, measured in abnormal.items():
        family = window_family(measured, windows, share_of_days, seed, draws)
        rows += _rows(model, windows, family)
    return typed_frame(rows, COLUMNS)


def window_family(
    measured: AbnormalReturns,
    windows: Sequence[Window],
    share_of_days: float,
    seed: int,
    draws: int = DRAWS,
) -> Family:
    """The statistics of S windows and their joint distribution under the null."""
    codes = np.unique(_day_zero(measured), return_inverse=True)[1]
    total, size = _sums(measured, windows, share_of_days, codes)
    testable = (size > 0).sum(axis=1) >= FEWEST_DATES
    n = size.sum(axis=1)
    with np.errstate(invalid="ignore"):
        mean = total.sum(axis=1) / n
    counts = _draws_of(size.shape[1], draws, seed)
    null = _t(counts, total, size, mean)
    once = _t(np.ones((1, size.shape[1])), total, size, np.zeros(len(windows)))[0]
    return Family(
        n=tuple(map(int, n)),
        dates=tuple(map(int, (size > 0).sum(axis=1))),
        mean=mean,
        statistic=np.where(testable, once, np.nan),
        resampled=null[np.isfinite(null[:, testable]).all(axis=1)],
    )


def _sums(
    measured: AbnormalReturns, windows: Sequence[Window], share_of_days: float, codes: np.ndarray
) -> tuple[Floats, Floats]:
    """(S, G) sums of CARs and numbers of deals by date; the first window needs all its days."""
    groups = int(codes.max(initial=-1)) + 1
    total, size = np.zeros((2, len(windows), groups))
    for at, window in enumerate(windows):
        keep = measured.complete(window, share_of_days if at else 1.0)
        total[at] = np.bincount(codes[keep], measured.car(window)[keep], groups)
        size[at] = np.bincount(codes[keep], minlength=groups)
    return total, size


def _rows(model: str, windows: Sequence[Window], family: Family) -> list[dict[str, object]]:
    known = np.isfinite(family.statistic)
    raw = np.full(len(windows), np.nan)
    raw[known] = resampled_p(family.statistic[known], family.resampled[:, known])
    later = np.flatnonzero(known & (np.arange(len(windows)) > 0))
    told = adjusted(raw[later], family.statistic[later], family.resampled[:, later])
    paid = {
        "p_holm": told.holm,
        "q_value": told.benjamini_hochberg,
        "p_romano_wolf": told.romano_wolf,
    }
    found = []
    for at, window in enumerate(windows):
        place = np.flatnonzero(later == at)
        own = {name: float(p[place[0]]) if place.size else np.nan for name, p in paid.items()}
        found.append(
            {
                "window_start": window.start,
                "window_end": window.end,
                "expected_return": model,
                "declared": "secondary" if at else "headline",
                "n": family.n[at],
                "dates": family.dates[at],
                "mean": family.mean[at],
                "statistic": family.statistic[at],
                "p_value": raw[at],
                **own,
                "draws": len(family.resampled),
            }
        )
    return found


def _day_zero(measured: AbnormalReturns) -> Dates:
    return np.asarray(measured.days[:, max(-measured.span.start, 0)])


def _draws_of(groups: int, draws: int, seed: int) -> Floats:
    """(draws, G) how often each date is drawn, G dates a draw."""
    stream = np.random.default_rng(seed)
    drawn = stream.integers(0, groups, (draws, groups)) + groups * np.arange(draws)[:, None]
    counts = np.bincount(drawn.ravel(), minlength=draws * groups)
    return np.asarray(counts.reshape(draws, groups), dtype=np.float64)


def _t(counts: Floats, total: Floats, size: Floats, centre: Floats) -> Floats:
    """(B, S) t of the mean about ``centre`` (S,) from draws (B, G) of dates, CR1 error.

    ``total`` and ``size`` (S, G) are each window's sums and deals by date. The squared scores
    Σ c (T - n·mean)² are expanded about ``centre``, so that they are products of matrices.
    """
    about = total - size * centre[:, None]
    with np.errstate(divide="ignore", invalid="ignore"):
        n = counts @ size.T
        mean = counts @ about.T / n
        total_square = counts @ (about**2).T
        left = total_square - 2 * mean * (counts @ (about * size).T)
        left += mean**2 * (counts @ (size**2).T)
        groups = counts @ (size > 0).T.astype(np.float64)
        error = np.sqrt(groups / (groups - 1) * np.maximum(left, 0)) / n
        return np.asarray(np.where(left > ROUNDING * total_square, mean / error, np.nan))
