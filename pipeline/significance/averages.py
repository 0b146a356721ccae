"""Other averages than the plain one, and one group of deals against another."""

from __future__ import annotations

import numpy as np
import pandas as pd
from scipy import special, stats

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.prices import Floats
from pipeline.core.tables import typed_frame
from pipeline.core.window import Window

AVERAGE_COLUMNS = {
    "average": "str",
    "value": "float64",
    "std_error": "float64",
    "ci_low": "float64",
    "ci_high": "float64",
    "n": "int64",
    "meaning": "str",
}
GROUP_COLUMNS = {
    "test": "str",
    "first": "str",
    "second": "str",
    "n_first": "int64",
    "n_second": "int64",
    "difference": "float64",
    "statistic": "float64",
    "df": "float64",
    "p_value": "float64",
    "source": "str",
}
TRIM = 0.1


def averages(
    car: Floats, variance: Floats, value: Floats, held: Floats, level: float
) -> pd.DataFrame:
    """The mean reaction under other weights, which may differ in sign from the plain one.

    Weighted means sum(w CAR) / sum(w), errors sqrt(sum(w² (CAR - mean)²)) / sum(w) with the
    factor n / (n - 1) (White 1980): equal weights; the inverse of each CAR's forecast variance;
    market value (Moeller, Schlingemann and Stulz 2005, JF 60: averages in percent and in money
    can differ in sign). The median has the sign test's interval, the trimmed mean Tukey and
    McLaughlin's (1963) error on the winsorised deals. The buy-and-hold mean is the plain one of
    returns compounded over the window (Barber and Lyon 1997, JFE 43).

    Args:
        car: (n,) decimal; variance: (n,) forecast variances; value: (n,) market values, NaN where
            unknown.
        held: (n,) buy-and-hold abnormal returns, decimal.
        level: of the intervals.

    Returns:
        ``average, value, std_error, ci_low, ci_high, n, meaning``; decimal.
    """
    n = len(car)
    if n < 3:
        return typed_frame([], AVERAGE_COLUMNS)
    known = np.isfinite(value) & (value > 0)
    rows = [
        _weighted("equal weights", car, np.ones(n), level, "every deal counts once"),
        _weighted(
            "by precision", car, 1 / variance, level, "deals measured with less noise count more"
        ),
        _trimmed(car, level),
        _median(car, level),
        _weighted(
            "buy and hold", held, np.ones(n), level,
            "returns compounded over the window, not added up; every deal counts once",
        ),
    ]  # fmt: skip
    if known.sum() > 2:
        meaning = "money gained or lost over money invested"
        rows.append(_weighted("by market value", car[known], value[known], level, meaning))
    return typed_frame(rows, AVERAGE_COLUMNS)


def _row(
    name: str, value: float, error: float, df: float, level: float, n: int, meaning: str
) -> dict[str, object]:
    reach = -float(special.stdtrit(df, (1 - level) / 2)) * error
    return {
        "average": name,
        "value": value,
        "std_error": error,
        "ci_low": value - reach,
        "ci_high": value + reach,
        "n": n,
        "meaning": meaning,
    }


def _weighted(
    name: str, car: Floats, weight: Floats, level: float, meaning: str
) -> dict[str, object]:
    n = len(car)
    share = weight / weight.sum()
    mean = float(share @ car)
    error = float(np.sqrt(n / (n - 1) * (share**2) @ (car - mean) ** 2))
    return _row(name, mean, error, n - 1, level, n, meaning)


def _trimmed(car: Floats, level: float) -> dict[str, object]:
    n, cut = len(car), int(TRIM * len(car))
    mean = float(stats.trim_mean(car, TRIM))
    winsorised = np.sort(car)
    winsorised[:cut], winsorised[n - cut :] = winsorised[cut], winsorised[n - cut - 1]
    error = float(winsorised.std(ddof=1) / ((1 - 2 * TRIM) * np.sqrt(n)))
    meaning = "without the tenth of the deals at each end"
    return _row("trimmed", mean, error, n - 2 * cut - 1, level, n, meaning)


def _median(car: Floats, level: float) -> dict[str, object]:
    """The median with the interval between order statistics that the sign test gives."""
    n, ordered = len(car), np.sort(car)
    tail = (1 - level) / 2
    at = int(stats.binom.ppf(tail, n, 0.5))
    at -= int(stats.binom.cdf(at, n, 0.5) > tail)
    ends = (float(ordered[at]), float(ordered[n - 1 - at])) if at >= 0 else (np.nan, np.nan)
    return {
        "average": "median",
        "value": float(np.median(car)),
        "std_error": np.nan,
        "ci_low": ends[0],
        "ci_high": ends[1],
        "n": n,
        "meaning": "half of the deals lie above it",
    }


def averages_of(
    abnormal: AbnormalReturns,
    window: Window,
    deals: pd.DataFrame,
    level: float,
    *,
    log: bool = False,
) -> pd.DataFrame:
    """:func:`averages` of the deals that traded on every day of ``window``.

    ``deals`` are the rows of ``abnormal`` in its order, with ``market_value``; ``log`` says whether
    its returns are logarithmic.
    """
    whole = abnormal.complete(window)
    value = deals["market_value"].to_numpy(np.float64)
    car, variance = abnormal.car(window)[whole], abnormal.car_variance(window)[whole]
    return averages(car, variance, value[whole], abnormal.bhar(window, log=log)[whole], level)


def groups_of(
    abnormal: AbnormalReturns, window: Window, groups: pd.Series, words: tuple[str, str]
) -> pd.DataFrame:
    """:func:`group_tests` of the deals that traded on every day of ``window``, by their group."""
    whole = abnormal.complete(window)
    treated: Floats = np.asarray(groups.map({words[0]: 0.0, words[1]: 1.0}), dtype=np.float64)
    return group_tests(
        abnormal.car(window)[whole], abnormal.standardised(window)[whole], treated[whole], words
    )


def group_tests(
    car: Floats, scar: Floats, treated: Floats, groups: tuple[str, str]
) -> pd.DataFrame:
    """The second group of deals against the first, by four tests.

    Welch's t of the CARs (Welch 1947, Biometrika 34) and of the standardised CARs, the
    Mann-Whitney test (Mann and Whitney 1947), and the median test: how many of each group lie
    above the common median, chi-squared with the correction for continuity (Mood 1950). Deals of
    one date are taken as independent.

    Args:
        car, scar: (n,) of the deals, decimal and standardised.
        treated: (n,) 0 or 1; other values leave no rows.
        groups: words for 0 and 1.

    Returns:
        One row a test; ``difference`` is the second less the first, decimal for CARs.
    """
    second, first = treated == 1, treated == 0
    if min(first.sum(), second.sum()) < 2 or not (first | second).all():
        return typed_frame([], GROUP_COLUMNS)
    shared = {
        "first": groups[0],
        "second": groups[1],
        "n_first": int(first.sum()),
        "n_second": int(second.sum()),
    }
    rows: list[dict[str, object]] = []
    for name, values in (("Welch t of the CARs", car), ("Welch t, standardised", scar)):
        found = stats.ttest_ind(values[second], values[first], equal_var=False)
        difference = float(values[second].mean() - values[first].mean())
        rows.append(
            {**shared, "test": name, "difference": difference, "statistic": float(found.statistic),
             "df": float(found.df), "p_value": float(found.pvalue), "source": "Welch 1947"}
        )  # fmt: skip
    ranks = stats.mannwhitneyu(car[second], car[first], method="asymptotic")
    difference = float(np.median(car[second]) - np.median(car[first]))
    rows.append(
        {**shared, "test": "Mann–Whitney", "difference": difference,
         "statistic": float(ranks.statistic), "df": np.nan, "p_value": float(ranks.pvalue),
         "source": "Mann and Whitney 1947"}
    )  # fmt: skip
    if (car > np.median(car)).any():
        above = stats.median_test(car[second], car[first])
        rows.append(
            {**shared, "test": "Median test", "difference": difference,
             "statistic": float(above.statistic), "df": 1.0, "p_value": float(above.pvalue),
             "source": "Mood 1950"}
        )  # fmt: skip
    return typed_frame(rows, GROUP_COLUMNS)
