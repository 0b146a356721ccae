"""Correlation and overlap among deals against loops over every pair.

The average correlation: Kolari and Pynnönen 2010, RFS 23. The overlap weights are this project's
own (compare Kolari, Pape and Pynnönen 2018): the loops below are their definition.
"""

from __future__ import annotations

import itertools
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.window import Window
from pipeline.significance.dependence import dependence, links
from pipeline.significance.pairs import COMMON_DAYS, overlap, pairwise
from pipeline.significance.sample import car_sample
from tests.significance.samples import WINDOW, clustered, linked


@pytest.fixture(scope="module", params=[(30, 0), (30, 400), (160, 400)], ids=str)
def ragged(request: pytest.FixtureRequest) -> AbnormalReturns:
    """Panels near and far apart: from common estimation windows to pairs without common dates."""
    days, gaps = request.param
    return clustered(days=days, gaps=gaps, deals=14)


def by_pandas(abnormal: AbnormalReturns) -> pd.DataFrame:
    """Estimation-window abnormal returns as dates by deals."""
    columns = {
        deal: pd.Series(
            abnormal.estimation_returns[row], index=abnormal.estimation_days[row].astype(str)
        )
        for row, deal in enumerate(abnormal.deals)
    }
    return pd.DataFrame(columns)


def test_pairwise_correlations(ragged: AbnormalReturns) -> None:
    """pandas' correlation over the dates that a pair has in common."""
    wide = by_pandas(ragged)
    known = wide.corr(min_periods=2).to_numpy()
    found, common = pairwise(ragged.estimation_returns, ragged.estimation_days)
    present = wide.notna().astype(float).to_numpy()
    np.testing.assert_array_equal(common, present.T @ present)
    enough = common >= COMMON_DAYS
    np.testing.assert_allclose(found[enough], known[enough], atol=1e-10)


def test_mean_over_pairs_with_enough_common_dates(ragged: AbnormalReturns) -> None:
    wide = by_pandas(ragged)
    pairs = []
    for one, other in itertools.combinations(ragged.deals, 2):
        both = wide[[one, other]].dropna()
        if len(both) >= COMMON_DAYS:
            pairs.append(np.corrcoef(both[one], both[other])[0, 1])
    found = dependence(ragged, WINDOW)
    assert found.pairs == len(pairs)
    assert found.mean == pytest.approx(np.mean(pairs), abs=1e-10)


@pytest.mark.parametrize("window", [Window(0, 0), Window(-1, 1), Window(-5, 5)])
def test_overlap_weights(window: Window, ragged: AbnormalReturns) -> None:
    """Each pair's correlation times the share of its event dates that are common; a pair with too
    few estimation dates counts with the mean of the others."""
    wide = by_pandas(ragged)
    where = ragged.columns(window)
    mean = dependence(ragged, window).mean
    n, total, meeting = len(ragged.deals), 0.0, 0
    for one, other in itertools.permutations(range(n), 2):
        both = wide.iloc[:, [one, other]].dropna()
        r = both.corr().iloc[0, 1] if len(both) >= COMMON_DAYS else mean
        shared = set(ragged.days[one, where]) & set(ragged.days[other, where])
        total += r * len(shared) / len(window)
        meeting += bool(shared)
    found = dependence(ragged, window)
    assert found.weighted == pytest.approx(total / (n * (n - 1)), abs=1e-10)
    assert found.overlapping == pytest.approx(meeting / (n * (n - 1)))


def test_one_date_for_all_weighs_every_pair_fully() -> None:
    """With equal event dates the weighted mean is the plain one: Kolari and Pynnönen's own."""
    same = clustered(days=1, gaps=0, correlation=0.2, deals=20)
    found = dependence(same, WINDOW)
    assert found.weighted == pytest.approx(found.mean, rel=1e-12)
    assert found.overlapping == 1.0
    assert (found.dates, found.largest) == (1, 20)
    assert found.mean == pytest.approx(0.2, abs=4 * found.noise + 0.05)
    # The closed form of a complete panel: (|sum of unit columns|² - n) / (n (n - 1)).
    unit = same.estimation_returns - same.estimation_returns.mean(axis=1, keepdims=True)
    unit /= np.linalg.norm(unit, axis=1, keepdims=True)
    closed = (np.sum(unit.sum(axis=0) ** 2) - 20) / (20 * 19)
    assert found.mean == pytest.approx(closed, abs=1e-12)


def test_a_pair_with_few_common_dates_counts_with_the_mean_of_the_others() -> None:
    same = clustered(days=1, gaps=0, deals=6)
    estimation = same.estimation_returns.copy()
    estimation[0, COMMON_DAYS - 1 :] = np.nan
    short = replace(same, estimation_returns=estimation)
    others = dependence(same.take(np.arange(1, 6)), WINDOW).mean
    found = dependence(short, WINDOW)
    assert found.pairs == 10
    assert found.mean == pytest.approx(others, abs=1e-12)
    assert found.weighted == pytest.approx(others, abs=1e-12)


def test_deals_far_apart_have_no_weight() -> None:
    days = np.array([["2020-01-06", "2020-01-07"], ["2020-02-03", "2020-02-04"]], "datetime64[D]")
    np.testing.assert_array_equal(overlap(days).toarray(), np.eye(2))
    far = clustered(days=400, gaps=0, deals=2, seed=12)
    apart = abs(int((far.days[1, 5] - far.days[0, 5]).astype(int)))
    assert apart > 10
    found = dependence(far, WINDOW)
    assert (found.weighted, found.overlapping) == (0.0, 0.0)
    assert found.adjustment(2) == 1.0
    assert found.effective_n(2) == 2.0


def test_overlap_counts_dates_not_days_around_the_event() -> None:
    days = np.array(
        [["2020-01-06", "2020-01-07", "2020-01-08"], ["2020-01-08", "2020-01-09", "NaT"]],
        "datetime64[D]",
    )
    assert overlap(days).toarray()[0, 1] == pytest.approx(1 / 3)


def test_no_pair_and_no_deal() -> None:
    alone = clustered(deals=1, gaps=0)
    for abnormal, n in ((alone, 1), (alone.select(np.array([False])), 0)):
        found = dependence(abnormal, WINDOW)
        assert np.isnan(found.mean)
        assert (found.weighted, found.pairs, found.largest) == (0.0, 0, n)


def test_noise_is_the_scatter_of_the_mean_under_independence() -> None:
    """sqrt(2 / (n (n-1) M)), checked by drawing independent panels."""
    means = [dependence(clustered(10, 1, 0.0, seed, 0), WINDOW).mean for seed in range(150)]
    noise = dependence(clustered(10, 1, 0.0, 0, 0), WINDOW).noise
    assert noise == pytest.approx(np.sqrt(2 / (10 * 9 * 100)), rel=1e-9)
    # Four Monte-Carlo standard errors of a standard deviation from 150 draws are 23%.
    assert np.std(means) == pytest.approx(noise, rel=0.25)


@pytest.mark.parametrize(("n", "r"), [(50, 0.1), (40, 0.02)])
def test_adjustment_and_effective_number(n: int, r: float) -> None:
    link = linked(r)
    assert link.adjustment(n) ** 2 == pytest.approx((1 - r) / (1 + (n - 1) * r))
    assert link.effective_n(n) == pytest.approx(n / (1 + (n - 1) * r))


@pytest.mark.parametrize("kept", [1, 2, 5, 9, 13, 14])
def test_links_of_a_part_are_those_of_the_part_alone(kept: int, ragged: AbnormalReturns) -> None:
    """Summed over the part, or from the whole less those left out: the same."""
    rows = np.random.default_rng(kept).permutation(14)[:kept]
    part = links(ragged).take(rows)
    alone = links(ragged.take(rows))
    np.testing.assert_allclose(part.totals(), alone.totals(), atol=1e-11)
    again = part.take(np.arange(kept)[::-1])
    np.testing.assert_allclose(again.totals(), alone.totals(), atol=1e-11)
    first, second = np.triu_indices(kept, 1)
    np.testing.assert_allclose(
        part.between(first, second), alone.between(first, second), atol=1e-12
    )


def test_links_made_once_serve_every_window(ragged: AbnormalReturns) -> None:
    known = links(ragged)
    for window in (Window(0, 0), Window(-5, 5)):
        fresh, reused = dependence(ragged, window), dependence(ragged, window, known)
        assert (fresh.mean, fresh.weighted) == (reused.mean, reused.weighted)
    gone = ragged.returns.copy()
    gone[3, 5] = np.nan
    fewer = replace(ragged, returns=gone)
    one = car_sample(fewer, WINDOW, 1.0).dependence
    other = car_sample(fewer, WINDOW, 1.0, known).dependence
    assert one.weighted == pytest.approx(other.weighted, abs=1e-12)
    assert one.mean == pytest.approx(other.mean, abs=1e-12)
