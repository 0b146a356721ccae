"""Every window under every model, with every test, and what several windows cost."""

from __future__ import annotations

from collections.abc import Callable, Collection, Mapping, Sequence
from dataclasses import replace

import numpy as np

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.estimate import Tested, TestResult, t_reach
from pipeline.core.multiplicity import holm
from pipeline.core.results import WindowTests
from pipeline.core.window import Window
from pipeline.significance.dependence import links
from pipeline.significance.sample import CarSample, car_sample
from pipeline.significance.validity import Reasons

TestFunction = Callable[[CarSample], Tested]


def all_windows(
    abnormal: Mapping[str, AbnormalReturns],
    windows: Sequence[Window],
    tests: Mapping[str, TestFunction],
    assumes: Mapping[str, Sequence[str]],
    share_of_days: float,
    level: float,
    seed: int = 20260301,
    headline_only: Collection[str] = (),
) -> tuple[WindowTests, ...]:
    """Test every window under every model; the first window is the headline.

    ``assumes`` names what each test takes for granted, held against each sample; tests of
    ``headline_only`` are made under the first model alone.

    The headline window needs all its days; the others ``share_of_days`` of them. p-values of the
    secondary windows are also given after Holm's correction within a model and a test.
    """
    found: list[WindowTests] = []
    for model, measured in abnormal.items():
        known = links(measured)
        own = tests if not found else {k: t for k, t in tests.items() if k not in headline_only}
        results = []
        for at, window in enumerate(windows):
            share = 1.0 if at == 0 else share_of_days
            sample = car_sample(measured, window, share, known, seed)
            results.append(_summary(model, sample, _tested(sample, own, assumes), level))
        adjusted = holm_by_test([result.tests for result in results[1:]])
        found += results[:1]
        found += [replace(r, p_holm=p) for r, p in zip(results[1:], adjusted, strict=True)]
    return tuple(found)


def _tested(
    sample: CarSample, tests: Mapping[str, TestFunction], assumes: Mapping[str, Sequence[str]]
) -> dict[str, Tested]:
    """Every test of a sample, each with the reason why it does not hold there, if any."""
    found: dict[str, Tested] = {}
    reasons = Reasons(sample)
    for key, test in tests.items():
        result = test(sample)
        if isinstance(result, TestResult):
            result = replace(result, doubt=reasons.against(assumes.get(key, ())))
        found[key] = result
    return found


def _summary(
    model: str,
    sample: CarSample,
    tests: Mapping[str, Tested],
    level: float,
) -> WindowTests:
    return WindowTests(
        window=sample.window,
        model=model,
        n=sample.n,
        mean=float(sample.car.mean()) if sample.n else np.nan,
        median=float(np.median(sample.car)) if sample.n else np.nan,
        std_dev=float(sample.car.std(ddof=1)) if sample.n > 1 else np.nan,
        share_positive=float((sample.car > 0).mean()) if sample.n else np.nan,
        interval=mean_interval(sample, level),
        tests=tests,
        p_holm={},
    )


def mean_interval(sample: CarSample, level: float) -> tuple[float, float]:
    """(low, high) for the mean CAR, decimal.

    Cross-sectional standard error, divided by Kolari–Pynnönen's factor so that deals which move
    together count for less, and t(n - 1); for a single deal its forecast standard deviation and
    t(M - d).
    """
    if sample.n == 0:
        return np.nan, np.nan
    mean = float(sample.car.mean())
    if sample.n == 1:
        half = t_reach(level, float(sample.df[0])) * float(sample.std_dev[0])
    else:
        error = sample.car.std(ddof=1) / np.sqrt(sample.n)
        half = t_reach(level, sample.n - 1) * error / sample.dependence.adjustment(sample.n)
    return mean - half, mean + half


def holm_by_test(results: Sequence[Mapping[str, Tested]]) -> list[dict[str, float]]:
    """Holm-adjusted p-values of each test over several windows (Holm 1979, SJS 6)."""
    adjusted: list[dict[str, float]] = [{} for _ in results]
    for key in results[0] if results else ():
        at = [i for i, tests in enumerate(results) if isinstance(tests[key], TestResult)]
        raw = [tests.p_value for i in at if isinstance(tests := results[i][key], TestResult)]
        for i, p in zip(at, holm(np.array(raw)), strict=True):
            adjusted[i][key] = float(p)
    return adjusted
