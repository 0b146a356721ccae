"""Exchange rates, and the returns with which securities left their exchanges."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import pandas as pd

from pipeline.core.findings import Finding
from pipeline.inputs.contracts import Column
from pipeline.inputs.files import ROW, Source, read_table
from pipeline.inputs.typed import finding, one_row_a_date, typed

# One of the left costs far less than one of the right, for decades: common practice, no source.
SMALL = {"JPY", "KRW", "IDR", "VND", "HUF", "CLP", "COP", "INR", "ISK", "RUB", "THB", "TWD"}
LARGE = {"EUR", "USD", "GBP", "CHF", "CAD", "AUD"}
APART = 0.2


def read_rates(source: Source, date_format: str, common: str) -> tuple[pd.DataFrame, list[Finding]]:
    """date, currency, rate: what one unit of the currency costs in the ``common`` one."""
    columns = [
        Column("date", "date", filled=True),
        Column("currency", "text", filled=True, why="the ISO 4217 code"),
        Column("rate", "number", why="what one unit of it costs in the common currency"),
    ]
    table, findings = typed(read_table(source), source, columns, date_format)
    table["currency"] = table["currency"].str.upper()
    bad = table["rate"] <= 0
    if bad.any():
        got = (f"{int(bad.sum())} rates of zero or below", "rates above zero", "Correct the cells.")
        findings.append(finding("bad_value", table[bad], source, ("rate",), got))
    findings += list(_inverse(table[~bad], source, common.upper()))
    once, more = one_row_a_date(table, source, ("currency", "date"))
    return once, findings + more


def _inverse(table: pd.DataFrame, source: Source, common: str) -> Iterator[Finding]:
    """Errors for rates turned over: single ones, and those of a small currency into a large one.

    A rate near one tells nothing, so the euro in dollars is not seen.
    """
    known = table.dropna(subset="rate")
    for currency in sorted(set(known["currency"])):
        rows = known[known["currency"] == currency]
        log = np.log(rows["rate"].to_numpy())
        middle = float(np.median(log))
        turned = (abs(middle) > APART) & (np.abs(log + middle) < np.abs(log - middle))
        if turned.any():
            some = rows[turned]
            words = (
                f"{len(some)} rates of {currency} such as {some['rate'].iloc[0]:g}, "
                f"where the others are about {np.exp(middle):g}",
                f"what one {currency} costs in {common}, on every row",
                "Turn those rates over.",
            )
            yield finding("inverse_rate", some, source, ("rate",), words)
        elif (currency in SMALL and common in LARGE and middle > 0) or (
            currency in LARGE and common in SMALL and middle < 0
        ):
            words = (
                f"rates of {currency} of about {np.exp(middle):g}",
                f"what one {currency} costs in {common}",
                f"Turn the rates over: these are what one {common} costs in {currency}.",
            )
            yield finding("inverse_rate", rows, source, ("rate",), words)


def read_delistings(source: Source, date_format: str) -> tuple[pd.DataFrame, list[Finding]]:
    """security, date, return (decimal, NaN if not known), reason."""
    columns = [
        Column("security", "text", filled=True, why="the code the deals use"),
        Column("date", "date", filled=True, why="the day it left the exchange"),
        Column("return", "number", optional=True),
        Column("reason", "text", optional=True),
    ]
    table, findings = typed(read_table(source), source, columns, date_format)
    low = table["return"] < -1
    high = table["return"] > 10
    if (low | high).any():
        rows = table[low | high]
        findings.append(
            finding(
                "return_unit",
                rows,
                source,
                ("return",),
                (
                    f"delisting returns such as {rows['return'].iloc[0]:g}",
                    "decimals from -1: -0.3 for a loss of 30%",
                    "Divide percentages by 100.",
                ),
            )
        )
    again = table[table.duplicated("security", keep=False)]
    again = again[~again.duplicated(["security", "date", "return", "reason"], keep=False)]
    if len(again):
        findings.append(
            finding(
                "conflicting_price",
                again,
                source,
                ("security",),
                (
                    f"two delistings of {again['security'].iloc[0]}",
                    "one row a security",
                    "Keep the right one.",
                ),
            )
        )
    return table.drop(columns=ROW).drop_duplicates(), findings
