"""The rumour beside the announcement: which date counts, and what the other one would give."""

from __future__ import annotations

import pandas as pd
import pytest

from pipeline.core.ledger import Action
from pipeline.core.prices import PricePanel
from pipeline.returns.events import locate
from pipeline.returns.rumours import dated, has_rumours, moved, rumour_entries, with_day_zero
from pipeline.returns.sessions import Sessions, sessions_between
from tests.returns.test_locating_events import OPTIONS, deals, prices


@pytest.fixture(scope="module")
def calendar() -> Sessions:
    return sessions_between("XLON", "2018-01-02", "2019-12-31")


@pytest.fixture(scope="module")
def panel(calendar: Sessions) -> PricePanel:
    return prices(calendar)


def rumoured(calendar: Sessions) -> pd.DataFrame:
    """D1 rumoured three sessions before, D2 in the morning of the same day, D3 never."""
    table = deals(calendar, ("D1", "A", 200), ("D2", "B", 200), ("D3", "C", 200))
    early = pd.Timestamp(f"{calendar.days[197]}T11:00", tz="UTC")
    same = pd.Timestamp(f"{calendar.days[200]}T09:00", tz="UTC")
    return table.assign(
        rumoured_utc=pd.Series([early, same, pd.NaT], dtype="datetime64[s, UTC]"),
        rumoured_date=pd.to_datetime(
            pd.Series([calendar.days[197], calendar.days[200], pd.NaT])
        ).astype("datetime64[s]"),
    )


def test_the_date_that_counts(panel: PricePanel, calendar: Sessions) -> None:
    table = rumoured(calendar)
    assert has_rumours(table)
    assert not has_rumours(table.drop(columns="rumoured_date"))
    positions = {}
    for earliest in (False, True):
        located, _ = locate(dated(table, earliest), {"XLON": panel}, {"XLON": calendar}, OPTIONS)
        positions[earliest] = located["position"].tolist()
    assert positions == {False: [200, 200, 200], True: [197, 200, 200]}


@pytest.mark.parametrize("earliest", [False, True])
def test_a_rumour_a_session_before_is_told(
    earliest: bool, panel: PricePanel, calendar: Sessions
) -> None:
    table = rumoured(calendar)
    located, _ = locate(dated(table, earliest), {"XLON": panel}, {"XLON": calendar}, OPTIONS)
    other, _ = locate(dated(table, not earliest), {"XLON": panel}, {"XLON": calendar}, OPTIONS)
    different = moved(located, other)
    (entry,) = rumour_entries(different, earliest)
    assert (entry.deal, entry.rule, entry.action) == ("D1", "rumour_before", Action.FLAGGED)
    assert entry.value == "rumour 3 sessions before the announcement"
    changed = with_day_zero(located, different)
    assert changed["position"].tolist() == [200 if earliest else 197, 200, 200]
    assert located["position"].tolist()[0] == (197 if earliest else 200)  # left as it was


def test_a_rumour_known_by_its_date_alone(panel: PricePanel, calendar: Sessions) -> None:
    table = rumoured(calendar)
    table["rumoured_utc"] = pd.Series([pd.NaT] * 3, dtype="datetime64[s, UTC]")
    located, _ = locate(dated(table, True), {"XLON": panel}, {"XLON": calendar}, OPTIONS)
    assert located["position"].tolist() == [197, 200, 200]
    assert located["timing"].tolist() == ["date only", "date only", "during the session"]
