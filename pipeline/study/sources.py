"""Keys about how a table is written where it is, and what they mean to the stage that reads it."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, Literal, TypeVar

from pydantic import AfterValidator, Field

from pipeline.core.findings import Finding, Severity
from pipeline.inputs.numerals import UNITS
from pipeline.inputs.source import CODES, POSTGRES, Source
from pipeline.study.part import Part

if TYPE_CHECKING:
    from pipeline.study.schema import Study

T = TypeVar("T")
TEXT_KEYS = ("delimiter", "encoding", "decimal")
# A scale as report.currency may word it -> the unit.
SCALES = {
    "": "one", "one": "one", "k": "thousand", "thousand": "thousand", "thousands": "thousand",
    "m": "million", "mn": "million", "million": "million", "millions": "million",
    "bn": "billion", "billion": "billion", "billions": "billion",
}  # fmt: skip


def _encoding(value: str) -> str:
    try:
        "".encode(value or "utf-8")
    except LookupError:
        raise ValueError(
            "must be the name of an encoding of text, such as cp1252, utf-16 or shift_jis"
        ) from None
    return value


class SourceKeys(Part):
    """How one table is written."""

    delimiter: Literal["", ",", ";", "\t", "|"] = Field(
        "",
        description="Mark between the cells of a csv file; told from its first rows if not said.",
    )
    encoding: Annotated[str, AfterValidator(_encoding)] = Field(
        "", description="Encoding of a csv file, such as cp1252; UTF-8 if not said."
    )
    decimal: Literal["", ".", ","] = Field(
        "",
        description="Decimal mark of a csv file's numbers: a point if not said. With a comma, "
        "points and spaces may part thousands.",
    )
    header_row: int = Field(
        1, ge=1, description="Row of a csv file or a sheet that holds the column names."
    )
    date_format: str = Field(
        "",
        description="How this table alone writes dates, if not as inputs.date_format says: "
        "'%d.%m.%Y', or 'excel'.",
    )
    table: str = Field("", description="Table of a DuckDB file or of PostgreSQL.")
    query: str = Field(
        "",
        description="Query that makes the table, in its place: 'SELECT ...'. Add ORDER BY where "
        "the order of rows matters, as it does for deals.",
    )
    layout: Literal["", "long", "wide"] = Field(
        "",
        description="wide: dates down and one column a security (exchange, currency). Not said, "
        "a price table without a column security is looked at.",
    )
    units: dict[str, Literal["one", "thousand", "million", "billion"]] = Field(
        default_factory=dict,
        description="What a column of money counts: { deal_value = 'thousand' }. It is brought to "
        "the scale that report.currency names.",
    )


def source_of(study: Study, table: str, path: Path) -> Source:
    """One table's place, with all that the study says of it."""
    inputs = study.inputs
    keys = _by_name(inputs.source).get(table, SourceKeys())
    series = getattr(study.series, table, None)
    returns = getattr(series, "given", "closes") == "returns"
    value = "rate" if table == "rates" else "return" if returns else "close"
    return Source(
        table,
        path,
        _by_name(inputs.columns).get(table, {}),
        _by_name(inputs.sheets).get(table, ""),
        delimiter=keys.delimiter,
        encoding=keys.encoding,
        decimal=keys.decimal,
        header_row=keys.header_row,
        relation=keys.table,
        query=keys.query,
        connection=inputs.connection,
        wide=keys.layout == "wide" if keys.layout else None,
        value=value,
        factors=_factors(study, keys),
        date_format=keys.date_format,
    )


def _by_name(tables: Mapping[Any, T]) -> dict[str, T]:
    return {str(name): value for name, value in tables.items()}


def _factors(study: Study, keys: SourceKeys) -> dict[str, float]:
    """Column -> what its money is multiplied by; columns that need no change are left out."""
    unit = UNITS[SCALES.get(_scale(study), "one")]
    return {name: UNITS[of] / unit for name, of in keys.units.items() if UNITS[of] != unit}


def _scale(study: Study) -> str:
    return study.report.currency.partition(" ")[2].strip().lower()


def source_checks(study: Study, file: str) -> Iterator[Finding]:
    """How the keys about a table fit where it is."""
    paths = {name: path for name, path in study.inputs if isinstance(path, Path)}
    for table, keys in _by_name(study.inputs.source).items():
        if table not in paths:
            yield _error(
                file,
                f"inputs.source.{table}",
                f"keys of a table that inputs.{table} does not name",
                f"inputs.{table}",
                "Name the table under [inputs], or delete the keys.",
            )
            continue
        yield from _of_file(file, table, keys, paths[table])
        yield from _of_units(study, file, table, keys)
    for table, path in paths.items():
        based = path == POSTGRES or path.suffix.lower() == ".duckdb"
        keys = _by_name(study.inputs.source).get(table, SourceKeys())
        if based and bool(keys.table) == bool(keys.query):
            yield _error(
                file,
                f"inputs.source.{table}",
                "both table and query" if keys.table else "neither table nor query",
                "one of them, for a table in a data base",
                f"Write [inputs.source.{table}] table = 'name', or query = 'SELECT ...'.",
            )


def _of_file(file: str, table: str, keys: SourceKeys, path: Path) -> Iterator[Finding]:
    kind = "postgresql" if path == POSTGRES else path.suffix.lower()
    misplaced = {
        **dict.fromkeys(TEXT_KEYS, kind != ".csv"),
        "header_row": kind not in (".csv", ".xlsx"),
        "table": kind not in (".duckdb", "postgresql"),
        "query": kind not in (".duckdb", "postgresql"),
    }
    for key, wrong in misplaced.items():
        if wrong and key in keys.model_fields_set and getattr(keys, key) != _default(key):
            yield _error(
                file,
                f"inputs.source.{table}.{key}",
                f"'{getattr(keys, key)}' for {path.name}",
                "a key of this kind of source",
                "Delete the key.",
            )
    if keys.layout == "wide" and table not in CODES:
        yield _error(
            file,
            f"inputs.source.{table}.layout",
            "'wide'",
            f"long, for any table but {', '.join(CODES)}",
            "Write one row an entry.",
        )
    if keys.decimal and keys.decimal == keys.delimiter:
        yield _error(
            file,
            f"inputs.source.{table}.decimal",
            f"'{keys.decimal}', which also parts the cells",
            "two different marks",
            "Correct one of them.",
        )


def _default(key: str) -> object:
    return SourceKeys.model_fields[key].default


def _of_units(study: Study, file: str, table: str, keys: SourceKeys) -> Iterator[Finding]:
    if not keys.units or (study.report.currency and _scale(study) in SCALES):
        return
    yield _error(
        file,
        "report.currency",
        f"'{study.report.currency}'" if study.report.currency else "nothing",
        f"a currency with its scale, such as USD million, for inputs.source.{table}.units",
        "Set report.currency: all money is brought to that scale.",
    )


def _error(file: str, key: str, got: str, expected: str, remedy: str) -> Finding:
    return Finding("bad_value", Severity.ERROR, file, got, expected, remedy, column=key)
