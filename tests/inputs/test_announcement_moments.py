"""When a deal became public: zones, changes of clocks, dates without a time.

Changes of clocks: IANA time zones (New York 14 March and 7 November 2021, London 28 March and 31
October 2021; Tokyo keeps one time).
"""

from __future__ import annotations

from datetime import UTC, date, datetime
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from pipeline.core.findings import Finding
from pipeline.inputs.files import ROW, Source
from pipeline.inputs.moments import Refusal, read_moment, read_moments

NEW_YORK, LONDON, TOKYO = "America/New_York", "Europe/London", "Asia/Tokyo"
SOURCE = Source("deals", Path("deals.csv"), {"announced_at": "When"})


def instant(cell: object, zone: str = "", date_format: str = "") -> datetime:
    found = read_moment(cell, zone, date_format)
    assert isinstance(found, datetime), found
    return found.astimezone(UTC)


def utc(text: str) -> datetime:
    return datetime.fromisoformat(text).replace(tzinfo=UTC)


@pytest.mark.parametrize(
    ("cell", "zone", "wanted"),
    [
        ("2021-03-15 18:00", NEW_YORK, "2021-03-15T22:00"),
        ("2021-03-12 18:00", NEW_YORK, "2021-03-12T23:00"),
        ("2021-03-15T09:00:30", LONDON, "2021-03-15T09:00:30"),
        ("2021-06-15 09:00", LONDON, "2021-06-15T08:00"),
        ("2021-06-15 08:00", TOKYO, "2021-06-14T23:00"),
        # An offset or Z is heeded and the zone column then is not.
        ("2021-06-15T09:00+02:00", TOKYO, "2021-06-15T07:00"),
        ("2021-06-15T09:00Z", "", "2021-06-15T09:00"),
        (datetime(2021, 6, 15, 9), LONDON, "2021-06-15T08:00"),
        (pd.Timestamp("2021-06-15 09:00"), LONDON, "2021-06-15T08:00"),
        (pd.Timestamp("2021-06-15 09:00", tz=TOKYO), "", "2021-06-15T00:00"),
        # The hour that ran twice, told apart by its offset.
        ("2021-11-07T01:30-04:00", NEW_YORK, "2021-11-07T05:30"),
        ("2021-11-07T01:30-05:00", NEW_YORK, "2021-11-07T06:30"),
        # An hour either side of the gap and the fold.
        ("2021-03-14 01:59", NEW_YORK, "2021-03-14T06:59"),
        ("2021-03-14 03:00", NEW_YORK, "2021-03-14T07:00"),
        ("2021-11-07 00:59", NEW_YORK, "2021-11-07T04:59"),
        ("2021-11-07 02:00", NEW_YORK, "2021-11-07T07:00"),
    ],
)
def test_instants(cell: object, zone: str, wanted: str) -> None:
    assert instant(cell, zone) == utc(wanted)


@pytest.mark.parametrize(
    ("cell", "zone"),
    [
        ("2021-03-14 02:30", NEW_YORK),  # skipped
        ("2021-11-07 01:30", NEW_YORK),  # twice
        ("2021-03-28 01:30", LONDON),
        ("2021-10-31 01:30", LONDON),
        (datetime(2021, 3, 14, 2, 30), NEW_YORK),
    ],
)
def test_local_times_that_never_were_or_were_twice(cell: object, zone: str) -> None:
    found = read_moment(cell, zone)
    assert isinstance(found, Refusal)
    assert found.rule == "impossible_local_time"
    # Tokyo does not change its clocks, so the same wall time is plain there.
    assert isinstance(read_moment(cell, TOKYO), datetime)


@pytest.mark.parametrize(
    "cell",
    ["2021-03-15", date(2021, 3, 15), datetime(2021, 3, 15), pd.Timestamp("2021-03-15"),
     "2021-03-15 00:00"],
)  # fmt: skip
@pytest.mark.parametrize("zone", ["", NEW_YORK])
def test_a_date_alone(cell: object, zone: str) -> None:
    found = read_moment(cell, zone)
    assert not isinstance(found, datetime)
    assert found == date(2021, 3, 15)


@pytest.mark.parametrize(
    ("cell", "zone", "rule"),
    [
        ("2021-03-15 18:00", "", "missing_zone"),
        ("2021-03-15 18:00", "Eastern", "missing_zone"),
        ("15/03/2021 18:00", LONDON, "unparseable_date"),
        ("2021-03-15 25:00", LONDON, "unparseable_date"),
        ("2021-03-15 18h", LONDON, "unparseable_date"),
        ("44270", LONDON, "unparseable_date"),
        (44270.75, LONDON, "unparseable_date"),
        ("21-03-15", LONDON, "unparseable_date"),
        ("1900-01-01", "", "date_out_of_range"),
        ("9999-12-31 10:00", LONDON, "date_out_of_range"),
    ],
)
def test_cells_without_a_moment(cell: object, zone: str, rule: str) -> None:
    found = read_moment(cell, zone)
    assert isinstance(found, Refusal)
    assert found.rule == rule
    assert found.expected
    assert found.remedy.endswith(".")


def test_a_declared_format_comes_first_and_iso_still_reads() -> None:
    declared = "%d/%m/%Y %H:%M"
    assert instant("05/04/2021 10:00", LONDON, declared) == utc("2021-04-05T09:00")
    assert instant("2021-04-05 10:00", LONDON, declared) == utc("2021-04-05T09:00")
    assert read_moment("05/04/2021", "", "%d/%m/%Y") == date(2021, 4, 5)
    assert instant("05.04.2021 10:00 +0300", "", "%d.%m.%Y %H:%M %z") == utc("2021-04-05T07:00")


def listed(
    cells: list[object], zones: list[str] | None = None, default: str = ""
) -> tuple[pd.DataFrame, list[Finding]]:
    deals = pd.DataFrame(
        {
            "announced_at": pd.Series(cells, dtype=object),
            "timestamp_zone": zones or [""] * len(cells),
            ROW: range(2, len(cells) + 2),
        }
    )
    return read_moments(deals, SOURCE, default, "")


def test_a_column_of_moments() -> None:
    cells: list[object] = ["2021-06-15 18:00", "2021-06-15", "2021-06-15 18:00"]
    moments, findings = listed(cells, [NEW_YORK, "", ""], LONDON)
    assert findings == []
    assert moments["announced_utc"].dtype == "datetime64[s, UTC]"
    assert moments["announced_utc"].tolist()[::2] == [
        pd.Timestamp("2021-06-15 22:00", tz="UTC"), pd.Timestamp("2021-06-15 17:00", tz="UTC"),
    ]  # fmt: skip
    assert pd.isna(moments["announced_utc"].iloc[1])
    assert (moments["announced_date"] == pd.Timestamp("2021-06-15")).all()
    assert moments["announced_date"].dtype == "datetime64[s]"


def test_the_date_is_the_one_written_not_that_of_utc() -> None:
    """New Year's Eve at 20:00 in New York is still the old year's deal."""
    moments, _ = listed(["2021-12-31 20:00", "2022-01-01T08:00+09:00"], [NEW_YORK, ""])
    assert moments["announced_date"].dt.strftime("%Y-%m-%d").tolist() == [
        "2021-12-31", "2022-01-01",
    ]  # fmt: skip
    assert moments["announced_utc"].dt.strftime("%Y-%m-%d %H").tolist() == [
        "2022-01-01 01", "2021-12-31 23",
    ]  # fmt: skip


def test_nothing_but_midnights_of_utc_are_dates() -> None:
    """What a data base makes of a column of dates: common practice, no source."""
    stored: list[object] = [
        pd.Timestamp("2021-06-15", tz="UTC"), pd.Timestamp("2021-06-16", tz="UTC"),
    ]  # fmt: skip
    moments, _ = listed(stored)
    assert moments["announced_utc"].isna().all()
    assert moments["announced_date"].dt.day.tolist() == [15, 16]
    with_a_time, _ = listed([*stored, pd.Timestamp("2021-06-17 07:00", tz="UTC")])
    assert with_a_time["announced_utc"].notna().all()


def test_each_bad_cell_is_a_finding_and_empty_ones_are_left_to_the_contract() -> None:
    cells: list[object] = ["soon", "", None, np.nan, pd.NaT, "2021-06-15 18:00", "2021-06-15"]
    moments, findings = listed(cells)
    assert [(finding.rule, finding.row) for finding in findings] == [
        ("unparseable_date", "2"), ("missing_zone", "7"),
    ]  # fmt: skip
    assert {(finding.file, finding.column) for finding in findings} == {("deals.csv", "When")}
    assert findings[0].got == "'soon'"
    assert moments["announced_date"].notna().tolist() == [False] * 6 + [True]
