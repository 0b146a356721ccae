"""Tables of a PostgreSQL data base, on a real server that lives as long as these tests.

They are left out, with a reason, where PostgreSQL is not installed.
"""

from __future__ import annotations

import json
import os
from collections.abc import Iterator
from pathlib import Path

import pandas as pd
import pytest

from pipeline.core.findings import Finding, InputProblem
from pipeline.inputs.files import read_table
from pipeline.inputs.market import read_prices
from pipeline.inputs.postgres import Fetcher
from pipeline.inputs.source import POSTGRES, Only, Source, only
from tests.database import SECRET

psycopg = pytest.importorskip("psycopg", reason="psycopg is not installed")


@pytest.fixture
def desk(server: dict[str, str], monkeypatch: pytest.MonkeyPatch) -> Iterator[None]:
    """The environment of somebody who may connect, and her tables."""
    for name, value in server.items():
        monkeypatch.setenv(name, value)
    with psycopg.connect("", autocommit=True) as link:
        link.execute("DROP SCHEMA public CASCADE")
        link.execute("CREATE SCHEMA public")
        link.execute(
            "CREATE TABLE prices (security text, date date, close float8, volume bigint, "
            "seen timestamptz, traded boolean)"
        )
        link.execute(
            "INSERT INTO prices SELECT code, date '2021-01-01' + day, 100 + day * 0.1, day, "
            "timestamptz '2021-01-01 12:00+02' + day * interval '1 day', day % 2 = 0 "
            "FROM unnest(ARRAY['007', 'B', 'C']) AS code, generate_series(0, 364) AS day"
        )
        yield


def prices(**keys: str) -> Source:
    return Source("prices", POSTGRES, **(keys or {"relation": "prices"}))  # type: ignore[arg-type]


def spans(first: str, last: str, *codes: str) -> Only:
    found = pd.DataFrame({"security": codes, "first": first, "last": last})
    return only(codes, found.astype({"first": "datetime64[s]", "last": "datetime64[s]"}))


def refusal(source: Source, folder: Path) -> Finding:
    with pytest.raises(InputProblem) as caught:
        Fetcher(folder).at_hand(source)
    (finding,) = caught.value.findings
    assert SECRET not in repr(caught.value) + repr(finding)
    return finding


@pytest.mark.usefixtures("desk")
def test_cells_arrive_as_a_file_would_hold_them(tmp_path: Path) -> None:
    table = read_table(Fetcher(tmp_path).at_hand(prices()))
    assert len(table) == 3 * 365
    first = table.iloc[0]
    assert first["security"] == "007"
    assert first["date"] == "2021-01-01"
    assert first["seen"] == "2021-01-01T10:00:00.000000Z"
    assert first["traded"] == "true"
    assert float(table["close"].iloc[3]) == 100 + 3 * 0.1


@pytest.mark.usefixtures("desk")
def test_only_what_the_events_touch_leaves_the_data_base(tmp_path: Path) -> None:
    fetcher, touched = Fetcher(tmp_path), spans("2021-03-01", "2021-03-10", "007", "C")
    source = fetcher.at_hand(prices(), touched)
    assert source.copy is not None
    lines = source.copy.read_text().splitlines()
    assert len(lines) == 1 + 2 * 10
    assert {line.split(",")[0] for line in lines[1:]} == {"007", "C"}
    table, findings = read_prices(source, touched, "")
    assert findings == []
    assert len(table) == 20
    assert sorted(table["security"].unique()) == ["007", "C"]


@pytest.mark.usefixtures("desk")
@pytest.mark.parametrize("kind", ["timestamp", "timestamptz", "text", "varchar(10)"])
def test_dates_of_every_type_are_compared_in_the_data_base(kind: str, tmp_path: Path) -> None:
    touched = spans("2021-03-01", "2021-03-10", "B")
    made = f"SELECT security, date::{kind} AS date, close FROM prices"
    source = Fetcher(tmp_path).at_hand(prices(query=made), touched)
    assert source.copy is not None
    assert len(source.copy.read_text().splitlines()) == 11
    table, _ = read_prices(source, touched, "")
    assert table["date"].min() == pd.Timestamp("2021-03-01")


@pytest.mark.usefixtures("desk")
def test_codes_that_are_numbers_and_a_date_that_is_none(tmp_path: Path) -> None:
    """5.0 is the code 5; a cell that is no date leaves the data base, to be refused by row."""
    made = (
        "SELECT 5.0 AS security, d AS date, 1.5 AS close "
        "FROM unnest(ARRAY['2021-03-02', '2020-01-01', 'soon']) AS d"
    )
    touched = spans("2021-03-01", "2021-03-10", "5")
    source = Fetcher(tmp_path).at_hand(prices(query=made), touched)
    assert source.copy is not None
    assert len(source.copy.read_text().splitlines()) == 3
    _, findings = read_prices(source, touched, "")
    assert [finding.rule for finding in findings] == ["unparseable_date"]


@pytest.mark.usefixtures("desk")
def test_a_wide_table_leaves_its_other_columns(tmp_path: Path) -> None:
    made = 'SELECT date, close AS "007", close + 1 AS "B" FROM prices WHERE security = \'C\''
    touched = spans("2021-03-01", "2021-03-10", "B", "D")
    source = Source("prices", POSTGRES, query=made, wide=True)
    source = Fetcher(tmp_path).at_hand(source, touched)
    assert source.copy is not None
    assert source.copy.read_text().splitlines()[0] == "date,B"
    table, _ = read_prices(source, touched, "")
    assert len(table) == 10


@pytest.mark.usefixtures("desk")
@pytest.mark.parametrize(
    "query",
    [
        "DELETE FROM prices RETURNING *",
        "SELECT 1; DELETE FROM prices",
        "SELECT 1) AS a; COMMIT; DELETE FROM prices; SELECT * FROM (SELECT 1",
        "SELECT * FROM prices) AS x; DROP TABLE prices --",
        "WITH gone AS (DELETE FROM prices RETURNING *) SELECT * FROM gone",
        "SELECT setval('s', 1)",
        "SELECT * FROM no_such_table",
    ],
)
def test_a_query_may_only_read(query: str, tmp_path: Path) -> None:
    finding = refusal(prices(query=query), tmp_path)
    assert finding.rule == "unreadable_file"
    assert finding.column == "inputs.source.prices.query"
    assert finding.file == "PostgreSQL, query of prices"
    with psycopg.connect("") as link:
        assert link.execute("SELECT count(*) FROM prices").fetchone() == (3 * 365,)


@pytest.mark.usefixtures("desk")
def test_a_function_that_writes_is_refused(tmp_path: Path) -> None:
    with psycopg.connect("", autocommit=True) as link:
        link.execute(
            "CREATE FUNCTION wipe() RETURNS int LANGUAGE sql AS 'DELETE FROM prices; SELECT 1'"
        )
    finding = refusal(prices(query="SELECT wipe()"), tmp_path)
    assert "read-only" in finding.got


@pytest.mark.usefixtures("desk")
@pytest.mark.parametrize(
    ("name", "value", "said"),
    [
        ("PGPASSWORD", "wrong", "the user or the password"),
        ("PGUSER", "stranger", "the user or the password"),
        ("PGDATABASE", "nowhere", "no such data base"),
        ("PGPORT", "1", "was not reached"),
    ],
)
def test_a_connection_that_fails_tells_nothing_of_it(
    name: str, value: str, said: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv(name, value)
    finding = refusal(prices(), tmp_path)
    assert finding.rule == "no_database"
    assert said in finding.got
    text = repr(finding)
    assert all(os.environ[word] not in text for word in ("PGHOST", "PGPASSWORD", "PGUSER"))


def test_a_named_variable_holds_the_connection(
    server: dict[str, str], desk: None, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    address = "postgresql://{PGUSER}:{PGPASSWORD}@{PGHOST}:{PGPORT}/{PGDATABASE}"
    for name in server:
        monkeypatch.delenv(name)
    source = prices(relation="public.prices", connection="DESK_DATABASE")
    assert refusal(source, tmp_path).column == "inputs.connection"
    monkeypatch.setenv("DESK_DATABASE", address.format(**server))
    assert len(read_table(Fetcher(tmp_path).at_hand(source))) == 3 * 365
    monkeypatch.setenv("DESK_DATABASE", "postgresql://" + SECRET + "@[::1]:bad/")
    assert refusal(source, tmp_path).rule == "no_database"


@pytest.mark.usefixtures("desk")
def test_the_digest_is_that_of_the_result(tmp_path: Path) -> None:
    first, again, other = (Fetcher(tmp_path) for _ in range(3))
    first.at_hand(prices())
    again.at_hand(prices(query="SELECT * FROM prices"))
    other.at_hand(prices(query="SELECT * FROM prices LIMIT 7"))
    assert first.digests == again.digests != other.digests
    assert json.dumps(first.digests) != "{}"
