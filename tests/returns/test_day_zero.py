"""Day zero: the session whose close could first hold the news.

Opening hours: the exchanges' own; holidays and half days used here are those of
``tests/reference/events.json`` or named beside the check. Changes of clocks: IANA time zones.
"""

from __future__ import annotations

from datetime import date, datetime, time
from zoneinfo import ZoneInfo

import numpy as np
import pytest

from pipeline.core.findings import InputProblem
from pipeline.core.ledger import Action
from pipeline.returns.day_zero import Timing, ledger_entry, place
from pipeline.returns.sessions import CalendarChange, Sessions, changed, sessions_between

NEW_YORK, LONDON, TOKYO = "America/New_York", "Europe/London", "Asia/Tokyo"


def utc(text: str, zone: str) -> np.datetime64:
    """A wall-clock time of ``zone`` as a UTC instant."""
    aware = datetime.fromisoformat(text).replace(tzinfo=ZoneInfo(zone)).astimezone(ZoneInfo("UTC"))
    return np.datetime64(aware.replace(tzinfo=None), "s")


def around(exchange: str, day: str) -> Sessions:
    at = np.datetime64(day, "D")
    return sessions_between(exchange, str(at - 40), str(at + 40))


def placed(exchange: str, text: str, zone: str, cutoff: int = 0) -> tuple[str, Timing]:
    """Day zero and timing of one announcement at a wall-clock time of ``zone``."""
    sessions = around(exchange, text[:10])
    date = np.array([text[:10]], dtype="datetime64[D]")
    found = place(np.array([utc(text, zone)]), date, sessions, cutoff)
    return str(sessions.days[found.position[0]]), found.timing[0]


@pytest.mark.parametrize(
    ("exchange", "text", "zone", "day", "timing"),
    [
        # New York: before the open, in the session, to the second of the close, after it.
        ("XNYS", "2023-03-14T07:30", NEW_YORK, "2023-03-14", Timing.BEFORE_OPEN),
        ("XNYS", "2023-03-14T12:00", NEW_YORK, "2023-03-14", Timing.DURING),
        ("XNYS", "2023-03-14T16:00", NEW_YORK, "2023-03-14", Timing.DURING),
        ("XNYS", "2023-03-14T16:00:01", NEW_YORK, "2023-03-15", Timing.AFTER_CLOSE),
        ("XNYS", "2023-03-14T18:05", NEW_YORK, "2023-03-15", Timing.AFTER_CLOSE),
        # Past midnight in UTC and still the evening before in New York.
        ("XNYS", "2023-03-14T21:30", NEW_YORK, "2023-03-15", Timing.AFTER_CLOSE),
        # Friday 18:00 counts for Monday, and for Tuesday when Monday is Presidents' Day.
        ("XNYS", "2023-03-10T18:00", NEW_YORK, "2023-03-13", Timing.AFTER_CLOSE),
        ("XNYS", "2023-02-17T18:00", NEW_YORK, "2023-02-21", Timing.AFTER_CLOSE),
        ("XNYS", "2023-03-11T11:00", NEW_YORK, "2023-03-13", Timing.CLOSED_DAY),
        # The half day after Thanksgiving closes at 13:00.
        ("XNYS", "2023-11-24T12:59", NEW_YORK, "2023-11-24", Timing.DURING),
        ("XNYS", "2023-11-24T14:00", NEW_YORK, "2023-11-27", Timing.AFTER_CLOSE),
        # London's half day before Christmas closes at 12:30; then two holidays follow.
        ("XLON", "2023-12-22T12:15", LONDON, "2023-12-22", Timing.DURING),
        ("XLON", "2023-12-22T15:00", LONDON, "2023-12-27", Timing.AFTER_CLOSE),
        # Tokyo's lunch (11:30 to 12:30) belongs to the session around it.
        ("XTKS", "2023-06-07T12:00", TOKYO, "2023-06-07", Timing.DURING),
        # Tokyo closed at 15:00 until 4 November 2024 and closes at 15:30 since.
        ("XTKS", "2024-11-01T15:10", TOKYO, "2024-11-05", Timing.AFTER_CLOSE),
        ("XTKS", "2024-11-06T15:10", TOKYO, "2024-11-06", Timing.DURING),
        # Storm Sandy shut New York for two days.
        ("XNYS", "2012-10-29T10:00", NEW_YORK, "2012-10-31", Timing.CLOSED_ONCE),
        # One market's holiday: 4 July 2023 in New York only, 28 August 2023 in London only.
        ("XNYS", "2023-07-04T10:00", NEW_YORK, "2023-07-05", Timing.CLOSED_DAY),
        ("XLON", "2023-07-04T10:00", NEW_YORK, "2023-07-04", Timing.DURING),
        ("XLON", "2023-08-28T10:00", LONDON, "2023-08-29", Timing.CLOSED_DAY),
        ("XNYS", "2023-08-28T10:00", LONDON, "2023-08-28", Timing.BEFORE_OPEN),
    ],
)
def test_time_of_day(exchange: str, text: str, zone: str, day: str, timing: Timing) -> None:
    assert placed(exchange, text, zone) == (day, timing)


def test_the_date_line_between_new_york_and_tokyo() -> None:
    """Monday 18:00 in New York is Tuesday 07:00 in Tokyo: Tuesday on both, at other closes."""
    text = "2023-05-15T18:00"
    assert placed("XNYS", text, NEW_YORK) == ("2023-05-16", Timing.AFTER_CLOSE)
    assert placed("XTKS", text, NEW_YORK) == ("2023-05-16", Timing.BEFORE_OPEN)
    tokyo, new_york = around("XTKS", "2023-05-16"), around("XNYS", "2023-05-16")
    closes = [
        item.closes[item.days == np.datetime64("2023-05-16")][0] for item in (tokyo, new_york)
    ]
    assert closes[1] - closes[0] == np.timedelta64(14, "h")


def test_a_tokyo_afternoon_is_the_same_morning_in_new_york() -> None:
    """16:00 in Tokyo is after its close (15:00 then) and before New York's open of that date."""
    assert placed("XTKS", "2023-05-16T16:00", TOKYO)[0] == "2023-05-17"
    assert placed("XNYS", "2023-05-16T16:00", TOKYO)[0] == "2023-05-16"


@pytest.mark.parametrize(
    ("text", "day"),
    [
        # New York changed its clocks on 12 March 2023, London on 26 March: four hours apart
        # in between, five before and after. 20:30 in London is then past the close at 16:00.
        ("2023-03-08T20:30", "2023-03-08"),
        ("2023-03-15T20:30", "2023-03-16"),
        ("2023-03-29T20:30", "2023-03-29"),
    ],
)
def test_the_weeks_when_clocks_change_apart(text: str, day: str) -> None:
    assert placed("XNYS", text, LONDON)[0] == day


@pytest.mark.parametrize(("cutoff", "day"), [(0, "2023-03-14"), (15, "2023-03-15")])
def test_a_cutoff_before_the_close(cutoff: int, day: str) -> None:
    """News ten minutes before the close is not wholly in it: common practice, no source."""
    assert placed("XNYS", "2023-03-14T15:50", NEW_YORK, cutoff)[0] == day


@pytest.mark.parametrize(
    ("date", "day", "timing"),
    [
        ("2023-03-14", "2023-03-14", Timing.DATE_ONLY),
        ("2023-03-11", "2023-03-13", Timing.DATE_ONLY_CLOSED),
        ("2023-07-04", "2023-07-05", Timing.DATE_ONLY_CLOSED),
    ],
)
def test_a_date_alone(date: str, day: str, timing: Timing) -> None:
    sessions = around("XNYS", date)
    nothing = np.array(["NaT"], dtype="datetime64[s]")
    found = place(nothing, np.array([date], dtype="datetime64[D]"), sessions)
    assert str(sessions.days[found.position[0]]) == day
    assert found.timing == (timing,)


def test_outside_the_sessions_known() -> None:
    sessions = sessions_between("XNYS", "2023-03-01", "2023-03-31")
    instants = np.array([utc("2023-04-20T10:00", NEW_YORK), utc("2022-04-20T10:00", NEW_YORK)])
    found = place(instants, instants.astype("datetime64[D]"), sessions)
    assert found.position.tolist() == [len(sessions.days), 0]
    assert found.closes[0] == ""
    assert found.reasons[0].endswith("the sessions known end before one that could react")


def test_the_whole_list_at_once_is_each_alone() -> None:
    texts = ["2023-03-14T07:30", "2023-03-14T18:05", "2023-03-11T11:00", "2023-11-24T14:00"]
    sessions = sessions_between("XNYS", "2023-01-01", "2023-12-31")
    instants = np.array([utc(text, NEW_YORK) for text in texts])
    dates = np.array([text[:10] for text in texts], dtype="datetime64[D]")
    found = place(instants, dates, sessions)
    alone = [placed("XNYS", text, NEW_YORK) for text in texts]
    assert [str(day) for day in sessions.days[found.position]] == [day for day, _ in alone]
    assert list(found.timing) == [timing for _, timing in alone]


SENTENCES = {
    Timing.BEFORE_OPEN: (
        "2023-03-14T07:30",
        "Public 2023-03-14 07:30 (America/New_York), before XNYS opened at 09:30; the close of "
        "2023-03-14 at 16:00 is the first to hold it",
    ),
    Timing.DURING: (
        "2023-11-24T12:00",
        "Public 2023-11-24 12:00 (America/New_York), while XNYS was open; the close of 2023-11-24 "
        "at 13:00 is the first to hold it",
    ),
    Timing.CUT_OFF: (
        "2023-03-14T15:50",
        "Public 2023-03-14 15:50 (America/New_York), less than 15 minutes before XNYS closed at "
        "16:00, so that close may not hold it whole; the close of 2023-03-15 at 16:00 is the first "
        "to hold it",
    ),
    Timing.AFTER_CLOSE: (
        "2023-11-22T18:05",
        "Public 2023-11-22 18:05 (America/New_York), after XNYS had closed at 16:00; the close of "
        "2023-11-24 at 13:00 is the first to hold it",
    ),
    Timing.CLOSED_DAY: (
        "2023-11-23T11:00",
        "Public 2023-11-23 11:00 (America/New_York), a weekend or holiday of XNYS; the close of "
        "2023-11-24 at 13:00 is the first to hold it",
    ),
    Timing.CLOSED_ONCE: (
        "2012-10-29T10:00",
        "Public 2012-10-29 10:00 (America/New_York), a day on which XNYS stayed closed out of "
        "turn; the close of 2012-10-31 at 16:00 is the first to hold it",
    ),
    Timing.DATE_ONLY: (
        "2023-11-24",
        "Public on 2023-11-24 at an unknown time; the close of 2023-11-24 at 13:00 may hold it, or "
        "the close of the session after",
    ),
    Timing.DATE_ONLY_CLOSED: (
        "2023-11-23",
        "Public on 2023-11-23 at an unknown time, a day without trading on XNYS; the close of "
        "2023-11-24 at 13:00 is the first to hold it",
    ),
}


@pytest.mark.parametrize("timing", Timing)
def test_every_timing_is_explained(timing: Timing) -> None:
    """Stamp, zone, exchange, its open or close of that date, and the close of day zero."""
    text, sentence = SENTENCES[timing]
    instant = utc(text, NEW_YORK) if "T" in text else np.datetime64("NaT", "s")
    dates = np.array([text[:10]], dtype="datetime64[D]")
    found = place(np.array([instant]), dates, around("XNYS", text[:10]), cutoff_minutes=15)
    assert found.timing == (timing,)
    assert found.reasons == (sentence,)
    assert found.stamps == (text.replace("T", " "),)
    assert found.closes[0] in sentence.split("; ")[1]


@pytest.mark.parametrize("timing", Timing)
def test_what_the_ledger_says_of_a_timing(timing: Timing) -> None:
    note = ledger_entry("D1", timing, np.datetime64("2023-03-14"))
    wanted = {
        Timing.BEFORE_OPEN: None,
        Timing.DURING: None,
        Timing.DATE_ONLY: ("time_unknown", Action.FLAGGED),
    }.get(timing, ("moved_to_session", Action.CHANGED))
    assert (note and (note.rule, note.action)) == wanted
    assert note is None or (note.deal == "D1" and "2023-03-14" in note.value)


def test_a_closure_the_study_names_is_out_of_turn() -> None:
    known = sessions_between("XLON", "2023-03-01", "2023-03-31")
    told = changed(known, CalendarChange(closed=(date(2023, 3, 14),)))
    instant = np.array([utc("2023-03-14T10:00", LONDON)])
    found = place(instant, np.array(["2023-03-14"], dtype="datetime64[D]"), told)
    assert found.timing == (Timing.CLOSED_ONCE,)
    assert str(told.days[found.position[0]]) == "2023-03-15"


def test_an_exchange_without_a_calendar() -> None:
    with pytest.raises(InputProblem) as caught:
        sessions_between("XQQQ", "2023-01-01", "2023-02-01")
    (finding,) = caught.value.findings
    assert (finding.rule, finding.file, finding.column) == ("unknown_exchange", "deals", "exchange")
    assert "XQQQ" in finding.got


def test_what_the_desk_knows_of_a_calendar() -> None:
    """A closure, an early close and an added session, as an exchange may announce overnight."""
    known = sessions_between("XHKG", "2023-08-28", "2023-09-08")
    assert np.datetime64("2023-09-05") in known.days
    change = CalendarChange(
        closed=(date(2023, 9, 5),),
        closes=((date(2023, 9, 4), time(12, 0)), (date(2023, 9, 3), time(16, 0))),
    )
    told = changed(known, change)
    assert np.datetime64("2023-09-05") not in told.days
    assert np.datetime64("2023-09-03") in told.days
    assert (np.diff(told.days).astype(int) > 0).all()
    early = told.closes[told.days == np.datetime64("2023-09-04")][0]
    assert early == np.datetime64("2023-09-04T04:00:00")
    instant = np.array(["2023-09-05T02:00:00"], dtype="datetime64[s]")
    placed = place(instant, np.array(["2023-09-05"], dtype="datetime64[D]"), told)
    assert told.days[placed.position[0]] == np.datetime64("2023-09-06")
