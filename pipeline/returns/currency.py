"""Everything in one currency: closes at the rate of their session, money at that before the deal.

A rate is what one unit of a currency costs in the common one.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from pipeline.core.findings import Finding, Severity
from pipeline.core.ledger import Action, LedgerEntry
from pipeline.core.prices import Dates, Floats, PricePanel
from pipeline.core.window import Window
from pipeline.returns.jumps import dates

# Hundredths that shares are quoted in: common practice, no source.
HUNDREDTHS = {"GBX": "GBP", "GBp": "GBP", "ZAC": "ZAR", "ZAc": "ZAR", "ILA": "ILS"}
DAYS_BACK = 7


@dataclass(frozen=True, slots=True, eq=False)
class Rates:
    """Exchange rates into the ``common`` currency.

    ``series`` holds a currency's dates in order and its rates, units of the common currency for
    one of its own.
    """

    common: str
    series: Mapping[str, tuple[Dates, Floats]] = field(default_factory=dict)

    def knows(self, currency: str) -> bool:
        """Whether there is any rate of the currency."""
        return _whole(currency)[0] in (self.common, *self.series)

    def on(self, days: Dates, currency: str, back: int = 0) -> Floats:
        """(T,) rates on dates; NaN without one there, or within ``back`` days before it."""
        code, part = _whole(currency)
        if code == self.common:
            return np.full(len(days), part)
        if code not in self.series:
            return np.full(len(days), np.nan)
        known, values = self.series[code]
        at = np.searchsorted(known, days, side="right") - 1
        found = np.where(at >= 0, values[np.maximum(at, 0)], np.nan)
        age = (days - known[np.maximum(at, 0)]).astype(np.int64)
        return np.where((at >= 0) & (age <= back), found * part, np.nan)


def _whole(currency: str) -> tuple[str, float]:
    """The currency a code stands for, and how much of it one unit is."""
    if currency in HUNDREDTHS:
        return HUNDREDTHS[currency], 0.01
    code = currency.upper()
    return (HUNDREDTHS[code], 0.01) if code in HUNDREDTHS else (code, 1.0)


def rates_of(common: str, table: pd.DataFrame | None) -> Rates:
    """Rates from a table of date, currency, rate; without a table only the common one is known."""
    if table is None:
        return Rates(common.upper())
    series = {}
    for currency, rows in table.dropna().sort_values("date").groupby("currency"):
        known = rows["date"].to_numpy().astype("datetime64[D]")
        series[str(currency).upper()] = known, rows["rate"].to_numpy(np.float64)
    return Rates(common.upper(), series)


@dataclass(frozen=True, slots=True)
class Quotation:
    """The currency that each security and each exchange's benchmark is quoted in."""

    securities: Mapping[str, str]
    benchmarks: Mapping[str, str]


def quotation(
    prices: pd.DataFrame, benchmarks: pd.DataFrame, of_prices: str, of_benchmarks: str
) -> tuple[Quotation, list[Finding]]:
    """What each is quoted in: by its column ``currency``, or else as declared for the file."""
    securities, found = _by_code(prices, "security", of_prices, "prices")
    levels, more = _by_code(benchmarks, "exchange", of_benchmarks, "benchmarks")
    return Quotation(securities, levels), found + more


def _by_code(
    table: pd.DataFrame, code: str, declared: str, file: str
) -> tuple[dict[str, str], list[Finding]]:
    if "currency" in table:
        rows = table[[code, "currency"]].drop_duplicates()
        rows = rows.assign(currency=rows["currency"].where(rows["currency"] != "", declared))
        rows = rows.drop_duplicates()
    else:
        rows = pd.DataFrame({code: table[code].unique(), "currency": declared})
    several = rows[rows.duplicated(code, keep=False)]
    without = rows[rows["currency"] == ""]
    found = [
        _unclear(file, f"{name} in {' and '.join(sorted(own['currency']))}")
        for name, own in several.groupby(code, sort=True)
    ]
    if len(without):
        found.append(_unclear(file, f"no currency of {', '.join(without[code][:4])}"))
    return dict(zip(rows[code], rows["currency"], strict=True)), found


def _unclear(file: str, got: str) -> Finding:
    return Finding(
        "currency_unclear",
        Severity.ERROR,
        file,
        got=got,
        expected=f"one currency for each, in a column currency or in series.{file}.currency",
        remedy="Fill the column; a listing that changed its currency needs a code for each.",
        column="currency",
    )


def session_rates(
    days: Dates, currencies: Iterable[str], rates: Rates, quoted: np.ndarray, what: str
) -> tuple[Floats, list[Finding]]:
    """(T, S) rates of each column's currency on sessions, and a warning for those missing.

    Args:
        days: (T,) sessions.
        currencies: S codes.
        quoted: (T, S) whether there is a value to convert.
        what: the table the values are from.
    """
    codes = list(currencies)
    by_code = {code: rates.on(days, code) for code in dict.fromkeys(codes)}
    found = (
        np.column_stack([by_code[code] for code in codes]) if codes else np.empty((len(days), 0))
    )
    findings = []
    for code, own in by_code.items():
        columns = [at for at, other in enumerate(codes) if other == code]
        lost = quoted[:, columns].any(axis=1) & ~np.isfinite(own)
        if lost.any():
            findings.append(_no_rate(code, rates.common, days[lost], len(days), what))
    return found, findings


def _no_rate(code: str, common: str, days: Dates, sessions: int, what: str) -> Finding:
    every = len(days) == sessions
    return Finding(
        "missing_rate",
        Severity.ERROR if every else Severity.WARNING,
        "rates",
        got=f"no rate of {code} in {common} on {len(days)} sessions: {dates(days)}",
        expected=f"a rate for every session with {what}",
        remedy="Complete the rates; returns that need one of those sessions are not used.",
        column="rate",
    )


def money_before(
    located: pd.DataFrame,
    panels: Mapping[str, PricePanel],
    rates: Rates,
    columns: Iterable[str],
    headline: Window,
) -> tuple[pd.DataFrame, list[LedgerEntry], list[Finding]]:
    """The deals' money in the common currency, at the rate one session before their window.

    A session without a rate takes the last one up to a week before.

    Args:
        located: deal_id, exchange, position, currency and the money columns.
        columns: those to convert, where the table has them.
        headline: the window declared before looking.

    Returns:
        The deals, what was converted, and an error for deals whose rate is not known.
    """
    money = [name for name in columns if name in located]
    filled = (
        located[money].notna().any(axis=1).to_numpy() if money else np.zeros(len(located), bool)
    )
    days = np.array(
        [
            panels[exchange].sessions[max(position + headline.start - 1, 0)]
            for exchange, position in zip(located["exchange"], located["position"], strict=True)
        ],
        dtype="datetime64[D]",
    )
    rate = _rate_of_rows(located["currency"], days, rates)
    lost = filled & ~np.isfinite(rate)
    currency = located["currency"].where(~filled, rates.common)
    converted = located.assign(
        **{name: located[name] * rate for name in money}, currency=currency.astype("str")
    )
    entries = [
        LedgerEntry(
            str(deal), "converted", Action.CHANGED, f"{code} at {value:.6g} on {day}", rates.common
        )
        for deal, code, value, day, wanted in zip(
            located["deal_id"], located["currency"], rate, days, filled, strict=True
        )
        if wanted and value != 1.0 and np.isfinite(value)
    ]
    return converted, entries, _money_lost(located[lost], days[lost], rates.common, "deals")


def money_on(
    table: pd.DataFrame, days: Dates, rates: Rates, columns: Iterable[str], file: str
) -> tuple[pd.DataFrame, list[Finding]]:
    """The table's money in the common currency, each row at the rate of its date.

    Args:
        table: currency, the money columns; N rows.
        days: (N,) dates; one without a rate takes the last one up to a week before.
        columns: those to convert, where the table has them.
        file: the table's name.
    """
    money = [name for name in columns if name in table]
    if not money:
        return table, []
    rate = _rate_of_rows(table["currency"], days, rates)
    lost = table[money].notna().any(axis=1).to_numpy() & ~np.isfinite(rate)
    converted = table.assign(**{name: table[name] * rate for name in money})
    return converted, _money_lost(table[lost], days[lost], rates.common, file)


def _rate_of_rows(currencies: pd.Series, days: Dates, rates: Rates) -> Floats:
    rate = np.full(len(days), np.nan)
    codes = currencies.to_numpy(dtype=object)
    for code in dict.fromkeys(codes):
        rows = codes == code
        rate[rows] = rates.on(days[rows], str(code), DAYS_BACK)
    return rate


def _money_lost(rows: pd.DataFrame, days: Dates, common: str, file: str) -> list[Finding]:
    if rows.empty:
        return []
    code = str(rows["currency"].iloc[0]) or "an empty currency"
    return [
        Finding(
            "missing_rate",
            Severity.ERROR,
            "rates" if rows["currency"].iloc[0] else file,
            got=f"{len(rows)} rows of {file} with money and no rate, first {code} on {days[0]}",
            expected=f"a rate in {common} on that date, or up to {DAYS_BACK} days before",
            remedy="Complete the rates, or the column currency.",
            column="rate",
        )
    ]
