"""One study read from every kind of source: the same bytes of data, whatever they came from."""

from __future__ import annotations

import io
import json
from collections.abc import Callable
from pathlib import Path

import duckdb
import pandas as pd
import pytest

from pipeline.core.clock import Clock
from pipeline.core.parquet import parquet_bytes
from pipeline.flow.commands import run
from pipeline.saving import save
from pipeline.study.load import load_study
from tests.database import SECRET
from tests.small import write_small_study

TABLES = ("deals", "prices", "benchmarks")
QUIET = '\n[scrutiny]\nrun = false\n\n[tests]\nuse = ["dependence_adjusted"]\n'
Frames = dict[str, pd.DataFrame]


def study_file(folder: Path, extra: str = "", **places: str) -> Path:
    """The small study with its tables elsewhere."""
    text = (folder / "study.toml").read_text()
    for table, place in places.items():
        text = text.replace(f'"{table}.csv"', f'"{place}"')
    path = folder / "elsewhere.toml"
    path.write_text(text.split("[instruments]")[0] + extra + QUIET)
    return path


def data_of(study: Path) -> dict[str, bytes]:
    """All that a run would leave under data/."""
    results, _ = run(load_study(study))
    return {name: parquet_bytes(frame) for name, frame in results.tables.items()}


@pytest.fixture(scope="module")
def tables(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("small")
    write_small_study(folder, deals=26)
    for name in ("prices", "benchmarks"):  # a workbook keeps fifteen digits
        pd.read_csv(folder / f"{name}.csv").round(6).to_csv(folder / f"{name}.csv", index=False)
    return folder


@pytest.fixture(scope="module")
def expected(tables: Path) -> dict[str, bytes]:
    """The data of the run from csv."""
    return data_of(study_file(tables))


def frames(folder: Path) -> Frames:
    return {name: pd.read_csv(folder / f"{name}.csv") for name in TABLES}


def as_parquet(folder: Path, made: Frames) -> str:
    for name, frame in made.items():
        frame.to_parquet(folder / f"{name}.parquet", index=False)
    return ""


def as_workbook(folder: Path, made: Frames) -> str:
    for name, frame in made.items():
        frame.to_excel(folder / f"{name}.xlsx", index=False, startrow=2, engine="openpyxl")
    return "".join(f"\n[inputs.source.{name}]\nheader_row = 3\n" for name in made)


def as_duckdb(folder: Path, made: Frames) -> str:
    for name, frame in made.items():
        with duckdb.connect(str(folder / f"{name}.duckdb")) as base:
            base.register("frame", frame)
            base.execute("CREATE TABLE kept AS SELECT * FROM frame")
    asked = {"deals": 'query = "SELECT * FROM kept ORDER BY deal_id;"'}
    return "".join(
        f"\n[inputs.source.{name}]\n" + asked.get(name, 'table = "kept"') + "\n" for name in made
    )


def as_german_csv(folder: Path, made: Frames) -> str:
    """Semicolons and decimal commas, in cp1252."""
    for name, frame in made.items():
        frame = frame.rename(columns={"size": "Größe"})
        frame.to_csv(
            folder / f"de_{name}.csv", index=False, sep=";", decimal=",", encoding="cp1252"
        )
    keys = 'decimal = ","\nencoding = "cp1252"\n'
    text = "".join(f"\n[inputs.source.{name}]\n{keys}" for name in made)
    return text + '\n[inputs.columns.deals]\nsize = "Größe"\n'


def as_dates_of_their_own(folder: Path, made: Frames) -> str:
    """Each table writes its dates in another way, none of them ISO 8601."""
    text = ""
    patterns = {"deals": "%d/%m/%Y %H:%M", "prices": "%d.%m.%Y", "benchmarks": "%m-%d-%Y"}
    for name, frame in made.items():
        column = "announced_at" if name == "deals" else "date"
        dates = pd.to_datetime(frame[column]).dt.strftime(patterns[name])
        frame.assign(**{column: dates}).to_csv(folder / f"own_{name}.csv", index=False)
        text += f'\n[inputs.source.{name}]\ndate_format = "{patterns[name]}"\n'
    return text


MADE: dict[str, tuple[Callable[[Path, Frames], str], str]] = {
    "parquet": (as_parquet, "{}.parquet"),
    "xlsx": (as_workbook, "{}.xlsx"),
    "duckdb": (as_duckdb, "{}.duckdb"),
    "another csv": (as_german_csv, "de_{}.csv"),
    "dates of their own": (as_dates_of_their_own, "own_{}.csv"),
}


@pytest.mark.parametrize("kind", MADE)
def test_the_same_study_gives_the_same_bytes(
    kind: str, tables: Path, expected: dict[str, bytes]
) -> None:
    make, pattern = MADE[kind]
    extra = make(tables, frames(tables))
    places = {name: pattern.format(name) for name in TABLES}
    found = data_of(study_file(tables, extra, **places))
    assert {name for name in expected if found[name] != expected[name]} == set()


def test_whole_histories_give_the_same_numbers(tables: Path, expected: dict[str, bytes]) -> None:
    """What events do not touch moves no number; the last bit may depend on the arrays' length."""
    study = study_file(tables)
    study.write_text(study.read_text().replace("[inputs]", '[inputs]\nhistory = "whole"'))
    results, _ = run(load_study(study))
    for name, frame in results.tables.items():
        touched = pd.read_parquet(io.BytesIO(expected[name]))
        whole = pd.read_parquet(io.BytesIO(parquet_bytes(frame)))
        pd.testing.assert_frame_equal(touched, whole, rtol=1e-9, atol=1e-12)


def test_a_data_base_gives_the_same_bytes_and_keeps_its_secret(
    tables: Path,
    expected: dict[str, bytes],
    server: dict[str, str],
    monkeypatch: pytest.MonkeyPatch,
    tmp_path: Path,
) -> None:
    import psycopg

    for name, value in server.items():
        monkeypatch.setenv(name, value)
    with psycopg.connect("", autocommit=True) as link:
        link.execute("DROP SCHEMA public CASCADE; CREATE SCHEMA public")
        for name, frame in frames(tables).items():
            kinds = {"f": "float8", "i": "int8"}
            columns = ", ".join(
                f'"{key}" {"date" if key == "date" else kinds.get(frame[key].dtype.kind, "text")}'
                for key in frame
            )
            link.execute(f"CREATE TABLE {name} ({columns})")  # type: ignore[call-overload]
            with link.cursor().copy(f"COPY {name} FROM STDIN (FORMAT csv, HEADER)") as rows:  # type: ignore[call-overload]
                rows.write((tables / f"{name}.csv").read_bytes())
    extra = "".join(f'\n[inputs.source.{name}]\ntable = "{name}"\n' for name in TABLES[1:])
    extra += '\n[inputs.source.deals]\nquery = "SELECT * FROM deals ORDER BY deal_id"\n'
    path = study_file(tables, extra, **dict.fromkeys(TABLES, "postgresql"))
    study = load_study(path)
    results, seconds = run(study)
    found = {name: parquet_bytes(frame) for name, frame in results.tables.items()}
    assert {name for name in expected if found[name] != expected[name]} == set()
    save(study, results, seconds, tmp_path / "out", Clock(lambda _: None))
    _refuse_secret(tmp_path / "out", server)


def _refuse_secret(folder: Path, server: dict[str, str]) -> None:
    """No file of a run holds the connection; the manifest says what was asked."""
    for path in folder.rglob("*"):
        if path.is_file():
            assert SECRET.encode() not in path.read_bytes()
    manifest = (folder / "manifest.json").read_text()
    assert server["PGPORT"] not in manifest
    inputs = json.loads(manifest)["inputs"]
    assert inputs["deals"]["query"] == "SELECT * FROM deals ORDER BY deal_id"
    assert all(len(one["sha256"]) == 64 for one in inputs.values())
    assert {one["path"] for one in inputs.values()} == {"postgresql"}
