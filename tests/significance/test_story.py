"""One deal's story: the same numbers as the sample's, with its own interval."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from pipeline.core.window import Window
from pipeline.significance.story import story_of
from tests.significance.samples import WINDOW, clustered


def test_the_story_repeats_the_samples_numbers() -> None:
    abnormal = clustered(deals=12, gaps=0)
    cars = abnormal.car(WINDOW)
    for at in (0, 5, 11):
        story = story_of(abnormal.deals[at], abnormal, WINDOW, 0.9)
        assert story is not None
        assert story.car == pytest.approx(cars[at], rel=1e-12)
        assert story.scar == pytest.approx(abnormal.standardised(WINDOW)[at], rel=1e-12)
        assert story.rank == 1 + int((cars > cars[at]).sum())
        half = stats.t.isf(0.05, abnormal.degrees_of_freedom[at]) * np.sqrt(
            abnormal.car_variance(WINDOW)[at]
        )
        assert (story.low, story.high) == pytest.approx((cars[at] - half, cars[at] + half))
        days = {day.day: day for day in story.days}
        total = sum(days[day].abnormal for day in range(WINDOW.start, WINDOW.end + 1))
        assert total == pytest.approx(story.car, rel=1e-10)
        zero = stats.t.isf(0.05, abnormal.degrees_of_freedom[at]) * np.sqrt(
            abnormal.car_variance(Window(0, 0))[at]
        )
        assert days[0].reach == pytest.approx(zero, rel=1e-10)


def test_a_deal_that_was_not_measured_has_none() -> None:
    assert story_of("nobody", clustered(deals=3, gaps=0), WINDOW, 0.95) is None
