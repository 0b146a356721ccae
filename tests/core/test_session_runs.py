"""Dates of estimation windows, laid out when asked for."""

from __future__ import annotations

import numpy as np

from pipeline.core.sessions import SessionRuns
from tests.returns.panels import weekdays


def test_runs_of_two_calendars_and_beyond_their_ends() -> None:
    one, other = weekdays(10), weekdays(6, "2020-03-02")
    runs = SessionRuns((one, other), np.array([1, 0, 0, 1]), np.array([0, 3, -2, 4]), 3)
    none = np.datetime64("NaT")
    wanted = np.array(
        [other[:3], one[3:6], [none, none, one[0]], [other[4], other[5], none]], "datetime64[D]"
    )
    np.testing.assert_array_equal(runs.dates(), wanted)
    np.testing.assert_array_equal(runs[np.array([2, 0])].dates(), wanted[[2, 0]])
    np.testing.assert_array_equal(runs[1:3].dates(), wanted[1:3])


def test_no_event_has_no_dates() -> None:
    empty = np.array([], dtype=np.int64)
    assert SessionRuns((weekdays(4),), empty, empty, 5).dates().shape == (0, 5)
