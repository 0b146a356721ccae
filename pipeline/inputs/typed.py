"""A file as a typed table, and the checks that every kind of table shares."""

from __future__ import annotations

import pandas as pd

from pipeline.core.findings import Finding, InputProblem, Severity
from pipeline.inputs.contracts import (
    Column,
    apply_contract,
    row_numbers,
    unknown_names,
    unknown_units,
)
from pipeline.inputs.numerals import scaled
from pipeline.inputs.sheet_shape import sheet_findings
from pipeline.inputs.source import ROW, Source


def typed(
    raw: pd.DataFrame, source: Source, columns: list[Column], date_format: str
) -> tuple[pd.DataFrame, list[Finding]]:
    """The contracted columns; without one of them no further check of the file makes sense."""
    table, findings = apply_contract(raw, source, columns, date_format)
    named = unknown_names(source, columns) + unknown_units(source, columns)
    findings = sheet_findings(source) + named + findings
    if any(finding.rule in ("missing_column", "unknown_key") for finding in findings):
        raise InputProblem(findings)
    table = scaled(table, source)
    if "exchange" in table:
        table["exchange"] = table["exchange"].str.upper()
    return table, findings


def extra_columns(
    fixed: list[Column], numbers: tuple[str, ...], texts: tuple[str, ...]
) -> list[Column]:
    """The columns a study names beyond the fixed ones."""
    taken = {column.name for column in fixed}
    why = "named in the study"
    return [
        *(Column(name, "number", why=why) for name in numbers if name not in taken),
        *(
            Column(name, "text", why=why)
            for name in texts
            if name not in taken and name not in numbers
        ),
    ]


def theirs(source: Source, names: tuple[str, ...]) -> str:
    """Our names as the file has them."""
    return ", ".join(source.columns.get(name, name) for name in names)


def finding(
    rule: str,
    rows: pd.DataFrame,
    source: Source,
    columns: tuple[str, ...],
    words: tuple[str, str, str],
    severity: Severity = Severity.ERROR,
) -> Finding:
    """A finding on ``rows``; ``words`` are what was found, what was expected, and what to do."""
    numbers, column = row_numbers(rows[ROW]), theirs(source, columns)
    return Finding(rule, severity, source.file, *words, rows=numbers, column=column)


def repeats(rows: pd.DataFrame, source: Source, key: tuple[str, ...], words: str) -> list[Finding]:
    """An error for rows that share a key."""
    if rows.empty:
        return []
    return [
        finding(
            "conflicting_deal",
            rows,
            source,
            key,
            (f"several rows for one {words}", f"one row a {words}", "Keep one row."),
        )
    ]


def one_row_a_date(
    table: pd.DataFrame, source: Source, key: tuple[str, str]
) -> tuple[pd.DataFrame, list[Finding]]:
    """Equal repeats are merged; values that differ on one date are an error."""
    content = [name for name in table.columns if name != ROW]
    once = table[~table.duplicated(content)].reset_index(drop=True)
    conflict = once.duplicated(list(key), keep=False) & once["date"].notna()
    if not conflict.any():
        return once.drop(columns=ROW), []
    first = once[conflict].iloc[0]
    got = f"two rows for {first[key[0]]} on {first['date']:%Y-%m-%d}"
    words = (got, f"one row a {key[0]} and date", "Keep the right one.")
    found = finding("conflicting_price", once[conflict], source, key, words)
    return once.drop(columns=ROW), [found]
