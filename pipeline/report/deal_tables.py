"""The tables of a deal's page."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from pipeline.core.rules import rule_title
from pipeline.report.days import day_of
from pipeline.report.document import Cell, Column, Day, Number, Row, Table, Text
from pipeline.report.material import Material, capital, prose
from pipeline.report.numerals import bp, count, in_unit, plain, true_minus, unit_digits

Record = Mapping[str, Any]


def days_table(days: list[Record], dates: str) -> Table:
    """The sessions one by one, ``dates`` in the house's way."""
    columns = (
        Column("Session"), Column("Date"), Column("Abnormal return", "bp"),
        Column("Expected return", "bp"), Column("Band, to each side", "bp"), Column("Outside"),
    )  # fmt: skip
    rows = tuple(
        (
            Text(true_minus(f"{int(day['day']):+d}" if day["day"] else "0")),
            _day(str(day["date"]), dates), bp(float(day["abnormal_return"])),
            bp(float(day["expected"])), bp(float(day["reach"])),
            Text("outside" if abs(day["abnormal_return"]) > day["reach"] else ""),
        )
        for day in days
    )  # fmt: skip
    return Table("days", prose("Session by session"), columns, rows)


def _day(text: str, dates: str) -> Cell:
    day = day_of(text)
    return Day(day, dates) if day else Text(text)


def characteristics_table(material: Material, row: Record, quartiles: list[Record]) -> Table | None:
    """The deal's own values beside the quartiles of all deals."""
    if not quartiles:
        return None
    columns = (
        Column("Characteristic"), Column("This deal"), Column("Lower quartile"), Column("Median"),
        Column("Upper quartile"), Column("Where it lies"),
    )  # fmt: skip
    rows: list[Row] = []
    for told in quartiles:
        name = str(told["variable"])
        value = float(row.get(name, np.nan))
        ends = (float(told["lower"]), float(told["median"]), float(told["upper"]))
        rows.append(
            (
                Text(capital(material.study.words(name))), _short(value),
                *(_short(end) for end in ends), Text(_place(value, ends)),
            )
        )  # fmt: skip
    for name in material.study.effects:
        if name in row:
            words = Text(capital(material.study.words(name)))
            rows.append((words, _code(row[name]), None, None, None, Text("")))
    note = prose("A quarter of the deals lie below the lower quartile, a quarter above the upper "
                 "one. A variable that is only yes or no has no place.")  # fmt: skip
    title = prose("Its characteristics beside those of all deals")
    return Table("characteristics", title, columns, tuple(rows), (note,))


def _short(value: float) -> Number | None:
    """Three significant digits, none of them behind the point of a whole number."""
    return plain(value, 0) if value.is_integer() else plain(value)


def _code(value: object) -> Text:
    """A level of a fixed effect: a year is no amount."""
    whole = isinstance(value, float) and value.is_integer()
    return Text(str(int(str(value).split(".")[0])) if whole else str(value))


def _place(value: float, ends: tuple[float, float, float]) -> str:
    if not np.isfinite(value):
        return "not known"
    if ends[0] == ends[2] or {value, *ends} <= {0.0, 1.0}:
        return ""
    if value < ends[0]:
        return "lowest quarter"
    return "highest quarter" if value > ends[2] else "middle half"


def fits_table(material: Material, fits: list[Record]) -> Table | None:
    """What each column predicts of the deal, and what it leaves."""
    if not fits:
        return None
    unit = material.unit
    columns = (
        Column("Column"), Column(f"{capital(material.outcome)}, observed", unit.short),
        Column("Fitted", unit.short), Column("Left over", unit.short),
    )  # fmt: skip
    digits = unit_digits(abs(float(fits[0]["observed"])) / 10 or 1.0, unit)
    rows = tuple(
        (
            Text(str(fit["column"])),
            *(in_unit(float(fit[name]), unit, digits) for name in
              ("observed", "fitted", "residual")),
        )
        for fit in fits
    )  # fmt: skip
    note = prose("What is left over is the deal’s own: no column explains it. A column that gives "
                 "a difference of groups and predicts no deal is not listed.")  # fmt: skip
    return Table("fits", prose("Fitted and left over"), columns, rows, (note,))


def influence_table(
    material: Material, left_out: list[Record], errors: Mapping[str, float]
) -> Table | None:
    """The numbers of the report without this deal; ``errors`` of each, ``std_error: target``."""
    if not left_out:
        return None
    unit = material.unit
    smallest = min(abs(float(row["change"])) for row in left_out)
    digits = max(1, unit_digits(smallest or 1.0, unit))
    columns = (
        Column("Number"), Column("With it", unit.short), Column("Without it", unit.short),
        Column("Change", unit.short), Column("Change", "standard errors"),
        Column("Place", "1 moves it most"),
    )  # fmt: skip
    rows = tuple(
        (
            Text(capital(str(row["target"]))),
            in_unit(float(row["estimate"]) - float(row["change"]), unit, digits),
            in_unit(float(row["estimate"]), unit, digits),
            in_unit(float(row["change"]), unit, digits),
            _in_errors(float(row["change"]), errors.get(f"std_error: {row['target']}")),
            count(int(row["place"])),
        )
        for row in left_out
    )  # fmt: skip
    return Table("influence", prose("With the deal and without it"), columns, rows)


def _in_errors(change: float, error: float | None) -> Cell:
    return None if not error else plain(change / error, 2)


def ledger_table(entries: list[Record]) -> Table:
    """What the ledger says of the deal."""
    columns = (
        Column("Stage"), Column("What was done"), Column("Rule", prose=True), Column("Value"),
        Column("Limit"),
    )  # fmt: skip
    rows = tuple(
        (
            Text(str(entry["stage"])), Text(str(entry["action"])),
            Text(rule_title(str(entry["rule"]))), Text(true_minus(str(entry["value"]))),
            Text(true_minus(str(entry["threshold"]))),
        )
        for entry in entries
    )  # fmt: skip
    return Table("ledger", prose("Lines of the ledger about this deal"), columns, rows)


def findings_table(found: list[Record]) -> Table | None:
    """Findings about the deal's row of the deal list."""
    if not found:
        return None
    columns = (
        Column("Finding", prose=True), Column("Where"), Column("Found", prose=True),
        Column("What to do", prose=True),
    )  # fmt: skip
    rows = tuple(
        (Text(rule_title(str(item["rule"]))), Text(str(item["where"])), Text(str(item["got"])),
         Text(str(item["remedy"])))
        for item in found
    )  # fmt: skip
    return Table("findings", prose("Findings about its row of the deal list"), columns, rows)
