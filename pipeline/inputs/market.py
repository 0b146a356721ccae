"""Daily prices or returns, index levels and factor returns."""

from __future__ import annotations

import pandas as pd

from pipeline.core.findings import Finding, Severity
from pipeline.core.prices import RISK_FREE
from pipeline.inputs.contracts import Column, row_numbers
from pipeline.inputs.files import ROW, Only, Source, read_plain, read_table, seen_layout
from pipeline.inputs.quoted import Quoted, QuotedFiles, as_simple, return_findings
from pipeline.inputs.typed import one_row_a_date, theirs, typed

Read = tuple[pd.DataFrame, list[Finding]]
DECLARED = QuotedFiles()
CLOSE = "the day's last price, adjusted for splits and dividends"
LEVEL = "the index level, dividends included if prices are"
SHOWN = 4
PLAIN_DAYS = ("date", "integer", "floating", "empty")


def read_prices(
    source: Source,
    only: Only | None,
    date_format: str,
    declared: QuotedFiles = DECLARED,
) -> Read:
    """Closes or returns of the securities and dates ``only`` names.

    Returns:
        security, date, close (or ``return``, simple and decimal), volume; a close of zero or below
        is missing. Besides ``currency`` if the study uses it.
    """
    quoted = declared.prices
    source, noted = seen_layout(source, only)
    columns = [
        Column("security", "text", filled=True, why="the code the deals use"),
        Column("date", "date", filled=True),
        _value(quoted, CLOSE),
        Column("volume", "number", optional=True),
        *_currency(quoted),
    ]
    if not quoted.currency and set(source.columns) <= {column.name for column in columns}:
        plain = read_plain(source, quoted.value, only, date_format)
        if plain is not None and not _doubted(plain, source, quoted):
            return plain, noted
    raw = read_table(source, [column.name for column in columns], only, date_format)
    table, findings = typed(raw, source, columns, date_format)
    table = table if only is None else only.within(table)
    raw, findings = raw.loc[table.index], noted + findings
    if table.empty:
        findings.append(_none_priced(source, only))
    if quoted.returns:
        findings += return_findings(table, source, ["return"], quoted)
        table["return"] = as_simple(table["return"].to_numpy(), quoted)
    else:
        table, more = _positive(table, source, declared.nonpositive_share)
        findings += more
    return _one_price_a_date(table, raw, source, findings)


def _doubted(table: pd.DataFrame, source: Source, quoted: Quoted) -> bool:
    """Whether anything is to be said of plain rows, which is then said by row; makes returns."""
    if table.empty:
        return True
    if not quoted.returns:
        return bool((table["close"] <= 0).any())
    if any(return_findings(table.assign(**{ROW: 0}), source, ["return"], quoted)):
        return True
    table["return"] = as_simple(table["return"].to_numpy(), quoted)
    return False


def _value(quoted: Quoted, why: str) -> Column:
    return Column(quoted.value, "number", why="the day's return" if quoted.returns else why)


def _currency(quoted: Quoted) -> list[Column]:
    return [Column("currency", "text", optional=True)] if quoted.currency else []


def _one_price_a_date(
    table: pd.DataFrame, raw: pd.DataFrame, source: Source, findings: list[Finding]
) -> Read:
    """Several rows a session that differ are an error; of a file within the day, one of its own."""
    once, more = one_row_a_date(table, source, ("security", "date"))
    timed = _times_of_day(raw["date"]) if "date" in raw else pd.Series(False, index=raw.index)
    if timed.any():
        conflict = bool(more)
        more = [_within_the_day(raw.loc[timed], source, conflict)]
    return once, findings + more


def _times_of_day(cells: pd.Series) -> pd.Series:
    """Which cells hold a time of day that is not midnight."""
    if pd.api.types.is_datetime64_any_dtype(cells):
        clock = cells.dt.tz_localize(None)
        later: pd.Series = clock.notna() & (clock != clock.dt.normalize())
        return later
    if pd.api.types.infer_dtype(cells) in PLAIN_DAYS:
        return pd.Series(False, index=cells.index)
    text = cells.astype(str)
    timed = text.str.contains(r"[T ]\d{1,2}:\d{2}") & ~text.str.contains(r"[T ]00:00")
    return timed.astype(bool)


def _within_the_day(rows: pd.DataFrame, source: Source, several: bool) -> Finding:
    return Finding(
        "intraday_prices",
        Severity.ERROR if several else Severity.WARNING,
        source.file,
        got=f"{len(rows)} times of day" + (", several rows a session" if several else ""),
        expected="one row a security and session, dated without a time of day",
        remedy="Export closing prices."
        if several
        else "The time is left off; check that the date is the exchange's own.",
        rows=row_numbers(rows[ROW]),
        column=theirs(source, ("date",)),
    )


def _none_priced(source: Source, only: Only | None) -> Finding:
    named = only.codes if only else ()
    return Finding(
        "no_prices",
        Severity.ERROR,
        source.file,
        got=f"no price of {', '.join(named[:SHOWN])}"
        + (" or the others" if len(named) > SHOWN else ""),
        expected="prices of the securities that deals and candidates name",
        remedy="Compare the codes of the two tables.",
        column=theirs(source, ("security",)),
    )


def _positive(table: pd.DataFrame, source: Source, share: float) -> Read:
    """The table without closes of zero or below; an error where a security has many."""
    bad = table["close"] <= 0
    if not bad.any():
        return table, []
    of_each = bad.groupby(table["security"]).mean()
    worst = of_each[of_each > share]
    severity = Severity.ERROR if len(worst) else Severity.WARNING
    codes = list(worst.index if len(worst) else of_each[of_each > 0].index)
    more = f" and {len(codes) - SHOWN} more" if len(codes) > SHOWN else ""
    finding = _nonpositive(table.loc[bad], source, severity, ", ".join(codes[:SHOWN]) + more)
    return table.assign(close=table["close"].mask(bad)), [finding]


def _nonpositive(rows: pd.DataFrame, source: Source, severity: Severity, codes: str) -> Finding:
    return Finding(
        "nonpositive_price",
        severity,
        source.file,
        got=f"{len(rows)} closes of zero or below, first {rows['close'].iloc[0]:g}, of {codes}",
        expected="prices above zero",
        remedy="Leave the cell empty when there was no price; if the column holds returns, set "
        f"series.{source.table}.given = 'returns'.",
        rows=row_numbers(rows[ROW]),
        column=source.columns.get("close", "close"),
    )


def read_benchmarks(source: Source, date_format: str, declared: QuotedFiles = DECLARED) -> Read:
    """Index levels or returns: exchange, date, close (or ``return``), market_value."""
    quoted = declared.benchmarks
    columns = [
        Column("exchange", "text", filled=True, why="the exchange whose market it is"),
        Column("date", "date", filled=True),
        _value(quoted, LEVEL),
        Column("market_value", "number", optional=True),
        *_currency(quoted),
    ]
    table, findings = typed(read_table(source), source, columns, date_format)
    if quoted.returns:
        findings += return_findings(table, source, ["return"], quoted)
        table["return"] = as_simple(table["return"].to_numpy(), quoted)
    else:
        bad = table["close"] <= 0
        if bad.any():
            codes = ", ".join(sorted(table.loc[bad, "exchange"].unique())[:SHOWN])
            findings.append(_nonpositive(table.loc[bad], source, Severity.ERROR, codes))
    once, more = one_row_a_date(table, source, ("exchange", "date"))
    return once, findings + more


def read_factors(source: Source, date_format: str, declared: QuotedFiles = DECLARED) -> Read:
    """Factor returns: exchange, date, one column a factor, decimal."""
    raw = read_table(source)
    named = [str(name) for name in raw.columns if name not in ("exchange", "date", ROW)]
    columns = [
        Column("exchange", "text", filled=True, why="the exchange whose factors they are"),
        Column("date", "date", filled=True),
        *(Column(name, "number") for name in named),
    ]
    table, findings = typed(raw, source, columns, date_format)
    # A risk-free rate hardly moves from day to day, and has a check of its own.
    moving = [name for name in named if name != RISK_FREE]
    findings += return_findings(table, source, moving, declared.factors)
    if declared.factors.unit == "percent":
        table[named] = table[named] / 100
    once, more = one_row_a_date(table, source, ("exchange", "date"))
    return once, findings + more
