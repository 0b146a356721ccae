"""Dependence of many deals by pairs of dates, against every pair of deals on its own."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.sessions import SessionRuns
from pipeline.core.window import Window
from pipeline.significance.dependence import Dependence, dependence
from pipeline.significance.many_deals import date_links
from pipeline.significance.pairs import pair_links
from tests.significance.samples import WINDOW, clustered


def both(abnormal: AbnormalReturns, window: Window) -> tuple[Dependence, Dependence]:
    exact = dependence(abnormal, window, pair_links(abnormal))
    return exact, dependence(abnormal, window, date_links(abnormal))


def test_one_date_and_no_gaps_is_every_pair_exactly() -> None:
    """Standardised over the same days, both are the closed form of the average correlation."""
    exact, found = both(clustered(days=1, gaps=0, deals=20), WINDOW)
    for name in ("mean", "weighted", "pairs", "overlapping", "noise", "weighted_noise", "dates"):
        assert getattr(found, name) == pytest.approx(getattr(exact, name), rel=1e-10), name


@pytest.mark.parametrize("window", [Window(0, 0), WINDOW, Window(-5, 5)])
@pytest.mark.parametrize(("days", "deals"), [(3, 60), (30, 120), (160, 200)])
def test_many_dates_differ_by_less_than_the_noise(window: Window, days: int, deals: int) -> None:
    abnormal = clustered(days=days, gaps=300, deals=deals, correlation=0.2)
    exact, found = both(abnormal, window)
    assert found.pairs == pytest.approx(exact.pairs, rel=0.02)
    assert found.overlapping == pytest.approx(exact.overlapping, rel=1e-9)
    assert found.mean == pytest.approx(exact.mean, rel=0.03)
    assert found.weighted == pytest.approx(exact.weighted, rel=0.01)
    assert found.noise == pytest.approx(exact.noise, rel=0.03)
    assert found.weighted_noise == pytest.approx(exact.weighted_noise, rel=0.02)
    assert found.adjustment(deals) == pytest.approx(exact.adjustment(deals), rel=0.01)


@pytest.mark.parametrize("seed", range(3))
def test_independent_deals_stay_inside_the_noise(seed: int) -> None:
    _, found = both(clustered(200, 60, 0.0, seed, 300), WINDOW)
    assert abs(found.mean) < 4 * found.noise
    assert abs(found.weighted) < 4 * found.weighted_noise


@pytest.mark.parametrize("kept", [2, 20, 100, 150])
def test_links_of_a_part_are_near_those_of_the_part_alone(kept: int) -> None:
    abnormal = clustered(days=30, gaps=100, deals=150)
    rows = np.random.default_rng(kept).permutation(150)[:kept]
    part = abnormal.take(rows)
    one = dependence(part, WINDOW, date_links(abnormal).take(rows))
    other = dependence(part, WINDOW, date_links(part))
    assert (one.pairs, one.overlapping) == (other.pairs, other.overlapping)
    if kept == 150:
        assert one.weighted == pytest.approx(other.weighted, rel=1e-12)
    assert abs(one.weighted - other.weighted) <= 4 * other.weighted_noise


def test_two_exchanges_share_the_dates_both_were_open() -> None:
    """Another calendar with holidays of its own: the same dates stand together."""
    one = clustered(days=5, gaps=0, deals=40)
    runs = one.estimation_sessions
    sessions = runs.calendars[0]
    other = np.delete(sessions, [60, 90])
    half = np.arange(40) % 2
    first = runs.first - 2 * half
    two = SessionRuns((sessions, other), half.astype(runs.calendar.dtype), first, runs.length)
    exact, found = both(replace(one, estimation_sessions=two), WINDOW)
    assert found.pairs == exact.pairs
    assert found.mean == pytest.approx(exact.mean, rel=0.03, abs=0.01)


def test_a_share_that_never_moves_is_in_no_pair() -> None:
    abnormal = clustered(days=1, gaps=0, deals=12)
    still = abnormal.estimation_returns.copy()
    still[3] = 0.0
    exact, found = both(replace(abnormal, estimation_returns=still), WINDOW)
    assert found.mean == pytest.approx(exact.mean, rel=0.25)
    assert np.isfinite([found.mean, found.weighted]).all()


def test_too_few_common_days_make_no_pair() -> None:
    abnormal = clustered(days=1, gaps=0, deals=8)
    short = abnormal.estimation_returns.copy()
    short[:, 20:] = np.nan
    found = dependence(
        replace(abnormal, estimation_returns=short),
        WINDOW,
        date_links(replace(abnormal, estimation_returns=short)),
    )
    assert found.pairs == 0
    assert np.isnan(found.mean)
    assert found.weighted == 0.0
