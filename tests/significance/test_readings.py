"""The headline once more under another date or listing, and days a dummy has taken up."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from pipeline.core.estimate import TestResult
from pipeline.core.reading import Reading
from pipeline.core.window import Window
from pipeline.significance.parametric import cross_sectional
from pipeline.significance.paths import average_paths
from pipeline.significance.readings import AS_DECLARED, readings_frame
from pipeline.significance.sample import car_sample
from pipeline.significance.story import story_of
from tests.significance.samples import WINDOW, clustered


def test_each_reading_is_tested_as_the_headline_is() -> None:
    lead = clustered(deals=20, gaps=0)
    other = replace(lead, returns=lead.returns + 0.001)
    readings = (Reading("day zero", "day zero at the rumour", 4, other),)
    frame = readings_frame(lead, readings, WINDOW, cross_sectional, 0.95, 1)
    assert frame["reading"].tolist() == [AS_DECLARED, "day zero at the rumour"]
    assert frame["changed"].tolist() == [0, 4]
    for row, abnormal in zip(frame.to_dict("records"), (lead, other), strict=True):
        sample = car_sample(abnormal, WINDOW, 1.0)
        result = cross_sectional(sample)
        assert isinstance(result, TestResult)
        assert row["mean"] == pytest.approx(sample.car.mean())
        assert (row["statistic"], row["p_value"]) == pytest.approx(
            (result.statistic, result.p_value)
        )
        assert row["ci_low"] < row["mean"] < row["ci_high"]
    assert frame["mean"].diff().iloc[1] == pytest.approx(0.001 * len(WINDOW))


def test_without_a_reading_there_is_no_row() -> None:
    frame = readings_frame(clustered(deals=5, gaps=0), (), WINDOW, cross_sectional, 0.95, 1)
    assert frame.empty
    assert "reading" in frame


def test_a_reading_of_one_deal_says_why_the_test_is_silent() -> None:
    lead = clustered(deals=12, gaps=0)
    one = lead.take(np.array([0]))
    frame = readings_frame(
        lead, (Reading("listing", "second", 1, one),), WINDOW, cross_sectional, 0.95, 1
    )
    last = frame.iloc[1]
    assert last["n"] == 1
    assert np.isnan(last["p_value"])
    assert last["reason"]


def test_a_day_left_out_adds_nothing_and_breaks_no_path() -> None:
    whole = clustered(deals=12, gaps=0)
    left = np.zeros_like(whole.returns, dtype=np.bool_)
    at = whole.columns(Window(1, 1)).start
    left[0, at] = True
    abnormal = replace(whole, returns=np.where(left, np.nan, whole.returns), left_out=left)
    sample = car_sample(abnormal, WINDOW, 1.0)
    assert sample.n == 12
    assert sample.car[0] == pytest.approx(whole.car(WINDOW)[0] - whole.returns[0, at])
    assert sample.std_dev[0] < np.sqrt(whole.car_variance(WINDOW)[0])
    groups = pd.Series(["all deals"] * 12)
    days = Window(WINDOW.start, WINDOW.end)
    path = average_paths(abnormal, groups, days, 0.95, 1)
    assert path["n"].tolist() == [12] * len(days)
    assert path["mean"].iloc[-1] == pytest.approx(sample.car.mean())
    story = story_of(abnormal.deals[0], abnormal, WINDOW, 0.95)
    assert story is not None
    day = next(day for day in story.days if day.day == 1)
    assert np.isnan(day.abnormal)
    assert np.isnan(day.reach)
    assert story.car == pytest.approx(sample.car[0])
