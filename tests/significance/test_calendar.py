"""When deals happen, whose windows meet, and the mean without each deal, counted one by one."""

from __future__ import annotations

from datetime import date

import numpy as np
import pandas as pd
import pytest

from pipeline.core.pictures import moved
from pipeline.core.tables import typed_frame
from pipeline.core.window import Window
from pipeline.significance.calendar import (
    calendar_facts,
    calendar_of,
    means_left_out,
    meeting,
    sharing_of,
)
from pipeline.significance.story import days_of, stories_of, story_of
from tests.significance.samples import clustered

WINDOW = Window(-1, 1)


def test_every_month_from_the_first_year_to_the_last_is_counted() -> None:
    days = pd.Series([date(2021, 3, 1), date(2021, 3, 31), date(2023, 12, 29)])
    rows = calendar_of(days)
    assert len(rows) == 36
    found = {(row["year"], row["month"]): row["deals"] for row in rows if row["deals"]}
    assert found == {(2021, 3): 2, (2023, 12): 1}


def test_windows_meet_if_they_share_a_date() -> None:
    abnormal = clustered(deals=25, gaps=0)
    days = abnormal.days[:, abnormal.columns(WINDOW)]
    spans = [(row[0], row[-1]) for row in days]
    by_hand = [
        sum(a[0] <= b[1] and b[0] <= a[1] for b in spans) - 1 for a in spans
    ]  # fmt: skip
    np.testing.assert_array_equal(meeting(abnormal, WINDOW), by_hand)
    rows = sharing_of(abnormal, WINDOW)
    assert sum(int(str(row["deals"])) for row in rows) == 25
    assert rows[-1]["share_with_more"] == 0
    shares = {row["others"]: row["share_with_more"] for row in rows}
    assert shares[0] == pytest.approx(np.mean(np.array(by_hand) > 0))
    facts = {row["name"]: row["value"] for row in calendar_facts(
        [{"year": 2020, "month": 1, "deals": 3}, {"year": 2020, "month": 2, "deals": 7}], rows
    )}  # fmt: skip
    assert (facts["busiest_month"], facts["busiest_deals"]) == (2, 7)
    assert facts["meeting"] == shares[0]


def test_the_mean_without_each_deal_is_the_mean_of_the_others() -> None:
    abnormal = clustered(deals=12, gaps=0)
    groups = {"company": [f"C{at % 4}" for at in range(12)]}
    rows, errors = means_left_out(abnormal, WINDOW, "mean", groups)
    car = abnormal.car(WINDOW)
    for row in rows:
        if row["dimension"] == "deal":
            keep = np.array([name != row["group"] for name in abnormal.deals])
        else:
            keep = np.array([name != row["group"] for name in groups["company"]])
        assert row["deals"] == (~keep).sum()
        assert row["estimate"] == pytest.approx(car[keep].mean())
        assert row["change"] == pytest.approx(car[keep].mean() - car.mean())
    assert errors["mean"] == pytest.approx(car.std(ddof=1) / np.sqrt(12))
    sizes = [abs(float(str(row["change"]))) for row in rows if row["dimension"] == "deal"]
    assert sizes == sorted(sizes, reverse=True)


def test_too_few_deals_are_not_left_out() -> None:
    assert means_left_out(clustered(deals=2, gaps=0), WINDOW, "mean", {}) == ([], {})


def test_deals_that_move_a_number_by_more_than_its_error_are_counted() -> None:
    columns = {"target": "str", "dimension": "str", "group": "str", "change": "float64"}
    rows = [
        {"target": "mean", "dimension": "deal", "group": name, "change": change}
        for name, change in (("A", -3.0), ("B", 1.5), ("C", 0.5), ("D", float("nan")))
    ]
    rows.append({"target": "mean", "dimension": "year", "group": "2020", "change": 9.0})
    found = {row["name"]: row["value"] for row in moved(typed_frame(rows, columns), {"mean": 1.0})}
    assert found == {"of: mean": 3, "beyond: mean": 2, "most: mean": -3.0, "std_error: mean": 1.0}


def test_the_stories_of_all_deals_are_those_told_one_by_one() -> None:
    abnormal = clustered(deals=9, gaps=0)
    days = days_of(abnormal, 0.9, set(abnormal.deals[2:]))
    assert set(days["deal"]) == set(abnormal.deals[2:])
    for row in stories_of(abnormal, WINDOW, 0.9, days):
        story = story_of(str(row["deal"]), abnormal, WINDOW, 0.9)
        assert story is not None
        for ours, theirs in (("car", "car"), ("ci_low", "low"), ("ci_high", "high"),
                             ("scar", "scar"), ("residual_sd", "residual_sd")):  # fmt: skip
            assert row[ours] == pytest.approx(getattr(story, theirs))
        assert (row["rank"], row["deals"]) == (story.rank, story.deals)
        own = days[days["deal"] == row["deal"]]
        assert own["date"].tolist() == [day.date for day in story.days]
        np.testing.assert_allclose(own["reach"], [day.reach for day in story.days])
        beyond = [abs(day.abnormal) > day.reach for day in story.days]
        assert (row["outside"], row["traded"]) == (sum(beyond), len(beyond))
