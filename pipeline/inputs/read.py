"""All tables of a study, typed and checked; errors of every file are shown together."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import TypeVar

import pandas as pd

from pipeline.core.findings import Finding, InputProblem, Severity, raise_errors
from pipeline.core.ledger import Action, LedgerEntry, StageLedger
from pipeline.inputs.contracts import Column, apply_contract, row_list, unknown_names
from pipeline.inputs.files import ROW, Source, read_table
from pipeline.inputs.moments import read_moments

T = TypeVar("T")
FEWEST_MATCHED = 0.5
MONEY = ("market_value", "deal_value")


@dataclass(frozen=True, slots=True)
class Wanted:
    """Which columns beyond the fixed ones a study uses, by table and kind."""

    deal_numbers: tuple[str, ...] = ()
    deal_texts: tuple[str, ...] = ()
    candidate_numbers: tuple[str, ...] = ()
    candidate_texts: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Tables:
    """The typed tables of a study.

    ``deals`` has one row a deal identifier; ``prices`` security, date, close, volume of the
    securities that deals or candidates name; ``benchmarks`` exchange, date, close; ``factors``
    exchange, date and one column a factor (None without a file); ``candidates`` likewise.
    """

    deals: pd.DataFrame
    ledger: StageLedger
    prices: pd.DataFrame
    benchmarks: pd.DataFrame
    candidates: pd.DataFrame | None
    factors: pd.DataFrame | None
    findings: tuple[Finding, ...] = field(default=())

    @property
    def listings(self) -> pd.DataFrame:
        """security, exchange: one row each, of deals and candidates."""
        named = [table for table in (self.deals, self.candidates) if table is not None]
        return pd.concat([table[["security", "exchange"]] for table in named]).drop_duplicates()

    @property
    def factor_names(self) -> tuple[str, ...]:
        """The factor file's columns beyond exchange and date."""
        names = [] if self.factors is None else list(self.factors.columns)
        return tuple(str(name) for name in names if name not in ("exchange", "date"))


def read_inputs(
    sources: Mapping[str, Source], wanted: Wanted, *, zone: str = "", date_format: str = ""
) -> Tables:
    """Read and check every table.

    Args:
        sources: table name -> file; deals, prices and benchmarks are required.
        wanted: the columns the study uses beyond the fixed ones.
        zone: time zone of announcements that name none.
        date_format: format of dates that are not ISO 8601.

    Raises:
        InputProblem: with the errors of all files at once.
    """
    found: list[Finding] = []

    def attempt(table: str, read: Callable[[Source], tuple[T, list[Finding]]]) -> T | None:
        """Collect the findings of one file instead of stopping there."""
        if table not in sources:
            return None
        try:
            value, findings = read(sources[table])
        except InputProblem as fault:
            found.extend(fault.findings)
            return None
        found.extend(findings)
        return value

    listed = attempt("deals", lambda file: _read_deals(file, wanted, zone, date_format))
    candidates = attempt("candidates", lambda file: _read_candidates(file, wanted, date_format))
    only = _securities(listed[0] if listed else None, candidates)
    if listed is not None:
        found += _across(listed[0], candidates, sources)
    prices = attempt("prices", lambda file: _read_prices(file, only, date_format))
    benchmarks = attempt("benchmarks", lambda file: _read_benchmarks(file, date_format))
    factors = attempt("factors", lambda file: _read_factors(file, date_format))
    raise_errors(found)
    if listed is None or prices is None or benchmarks is None:
        raise KeyError("deals, prices and benchmarks must each have a source")
    return Tables(*listed, prices, benchmarks, candidates, factors, tuple(found))


def _across(
    deals: pd.DataFrame, candidates: pd.DataFrame | None, sources: Mapping[str, Source]
) -> list[Finding]:
    """What deals and candidates say together: one exchange a security, candidates that match."""
    tables = [deals] if candidates is None else [deals, candidates]
    pairs = pd.concat([table[["security", "exchange"]] for table in tables]).drop_duplicates()
    pairs = pairs[(pairs["security"] != "") & (pairs["exchange"] != "")]
    several = pairs[pairs.duplicated("security", keep=False)]
    findings = []
    for security, rows in several.groupby("security", sort=True):
        findings.append(
            Finding(
                "two_exchanges",
                Severity.ERROR,
                " and ".join(sources[n].file for n in ("deals", "candidates") if n in sources),
                got=f"security '{security!s}' on {' and '.join(sorted(rows['exchange']))}",
                expected="one exchange a security code",
                remedy="Correct the exchange, or give each listing a code of its own.",
                column="exchange",
            )
        )
    if candidates is None:
        return findings
    matched = deals["deal_id"].isin(candidates["deal_id"]).mean()
    if matched < FEWEST_MATCHED:
        findings.append(
            Finding(
                "candidate_missing",
                Severity.ERROR,
                sources["candidates"].file,
                got=f"{matched:.0%} of the deals are named by a candidate",
                expected=f"at least {FEWEST_MATCHED:.0%}: the deal_id of each year's first deal",
                remedy="Fill deal_id as in the deal list, and add the companies that are missing.",
                column="deal_id",
            )
        )
    return findings


def _securities(*tables: pd.DataFrame | None) -> tuple[str, list[str]] | None:
    named = {code for table in tables if table is not None for code in table["security"]}
    return ("security", sorted(named)) if named else None


def _read_deals(
    source: Source, wanted: Wanted, zone: str, date_format: str
) -> tuple[tuple[pd.DataFrame, StageLedger], list[Finding]]:
    fixed = [
        Column("deal_id", "text", filled=True, why="a name for each deal that no other has"),
        Column("security", "text", filled=True, why="the acquirer's code in the price file"),
        Column("exchange", "text", filled=True, why="the ISO 10383 code of the listing"),
        Column("announced_at", "stamp", filled=True, why="when the deal became public"),
        Column("timestamp_zone", "text", optional=True),
        Column("currency", "text", optional=True),
        Column("market_value", "number", optional="market_value" not in wanted.deal_numbers),
        Column("earnings_release", "date", optional=True),
        Column("status", "text", optional=True),
        Column("year", "number", optional="year" not in wanted.deal_numbers),
    ]
    columns = fixed + _extra(fixed, wanted.deal_numbers, wanted.deal_texts)
    typed, findings = _typed(read_table(source), source, columns, date_format)
    moments, more = read_moments(typed, source, zone, date_format)
    findings += more
    deals, ledger, more = _one_row_a_deal(moments, source)
    findings += more + _one_currency(deals, source, wanted)
    no_year = deals["year"].isna()
    deals["year"] = deals["year"].where(~no_year, deals["announced_date"].dt.year)
    return (deals.drop(columns="announced_at"), ledger), findings


def _typed(
    raw: pd.DataFrame, source: Source, columns: list[Column], date_format: str
) -> tuple[pd.DataFrame, list[Finding]]:
    """The contracted columns; without one of them no further check of the file makes sense."""
    typed, findings = apply_contract(raw, source, columns, date_format)
    findings = unknown_names(source, columns) + findings
    if any(finding.rule in ("missing_column", "unknown_key") for finding in findings):
        raise InputProblem(findings)
    if "exchange" in typed:
        typed["exchange"] = typed["exchange"].str.upper()
    return typed, findings


def _extra(fixed: list[Column], numbers: tuple[str, ...], texts: tuple[str, ...]) -> list[Column]:
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


def _one_row_a_deal(
    deals: pd.DataFrame, source: Source
) -> tuple[pd.DataFrame, StageLedger, list[Finding]]:
    """Exact duplicates leave with a ledger entry; rows that differ are an error."""
    content = [name for name in deals.columns if name != ROW]
    repeated = deals.duplicated(content, keep="first")
    entries = tuple(
        LedgerEntry(
            f"{deal} (row {row})", "duplicate_deal", Action.DROPPED, f"row {row}", "one row a deal"
        )
        for deal, row in deals.loc[repeated, ["deal_id", ROW]].itertuples(index=False)
    )
    kept = deals[~repeated].reset_index(drop=True)
    conflict = kept[kept.duplicated("deal_id", keep=False)]
    findings = [
        Finding(
            "conflicting_deal",
            Severity.ERROR,
            source.file,
            got=f"deal '{deal!s}' on rows that differ",
            expected="one row a deal identifier",
            remedy="Keep one row, or give the second deal an identifier of its own.",
            row=row_list(rows[ROW]),
            column=source.columns.get("deal_id", "deal_id"),
        )
        for deal, rows in conflict.groupby("deal_id", sort=True)
        if deal
    ]
    return kept, StageLedger("deal list", len(deals), entries), findings


def _one_currency(deals: pd.DataFrame, source: Source, wanted: Wanted) -> list[Finding]:
    used = [name for name in MONEY if name in wanted.deal_numbers or name == "market_value"]
    named = sorted({code for code in deals["currency"] if code})
    if len(named) < 2 or not any(name in deals and deals[name].notna().any() for name in used):
        return []
    return [
        Finding(
            "mixed_currencies",
            Severity.ERROR,
            source.file,
            got=", ".join(named),
            expected="one currency in all money columns",
            remedy="Convert the money columns at the rate before the announcement.",
            column=source.columns.get("currency", "currency"),
        )
    ]


def _read_candidates(
    source: Source, wanted: Wanted, date_format: str
) -> tuple[pd.DataFrame, list[Finding]]:
    fixed = [
        Column("security", "text", filled=True, why="the company's code in the price file"),
        Column("exchange", "text", filled=True, why="the ISO 10383 code of the listing"),
        Column("year", "number", filled=True, why="one row a company and year"),
        Column("as_of", "date", filled=True, why="the date its values were known"),
        Column("deal_id", "text", why="the year's first deal of the company, empty if none"),
    ]
    columns = fixed + _extra(fixed, wanted.candidate_numbers, wanted.candidate_texts)
    typed, findings = _typed(read_table(source), source, columns, date_format)
    years = typed[typed.duplicated(["security", "year"], keep=False)]
    named = typed[typed["deal_id"] != ""]
    deals = named[named.duplicated("deal_id", keep=False)]
    findings += _repeats(years, source, ("security", "year"), "company and year")
    return typed, findings + _repeats(deals, source, ("deal_id",), "deal")


def _repeats(rows: pd.DataFrame, source: Source, key: tuple[str, ...], words: str) -> list[Finding]:
    if rows.empty:
        return []
    return [
        Finding(
            "conflicting_deal",
            Severity.ERROR,
            source.file,
            got=f"several rows for one {words}",
            expected=f"one row a {words}",
            remedy="Keep one row.",
            row=row_list(rows[ROW]),
            column=_theirs(source, key),
        )
    ]


def _theirs(source: Source, names: tuple[str, ...]) -> str:
    """Our names as the file has them."""
    return ", ".join(source.columns.get(name, name) for name in names)


def _read_prices(
    source: Source, only: tuple[str, list[str]] | None, date_format: str
) -> tuple[pd.DataFrame, list[Finding]]:
    columns = [
        Column("security", "text", filled=True, why="the code the deals use"),
        Column("date", "date", filled=True),
        Column("close", "number", why="the day's last price, adjusted for splits and dividends"),
        Column("volume", "number", optional=True),
    ]
    raw = read_table(source, [column.name for column in columns], only)
    typed, findings = _typed(raw, source, columns, date_format)
    if typed.empty:
        findings.append(_none_priced(source, only))
    bad = typed["close"] <= 0
    if bad.any():
        findings.append(_nonpositive(typed.loc[bad], source))
    once, more = _one_row_a_date(typed, source, ("security", "date"))
    return once, findings + more


def _none_priced(source: Source, only: tuple[str, list[str]] | None) -> Finding:
    named = only[1] if only else []
    return Finding(
        "no_prices",
        Severity.ERROR,
        source.file,
        got=f"no price of {', '.join(named[:4])}" + (" or the others" if len(named) > 4 else ""),
        expected="prices of the securities that deals and candidates name",
        remedy="Compare the codes of the two tables.",
        column=_theirs(source, ("security",)),
    )


def _nonpositive(rows: pd.DataFrame, source: Source) -> Finding:
    return Finding(
        "nonpositive_price",
        Severity.ERROR,
        source.file,
        got=f"{len(rows)} closes of zero or below, first {rows['close'].iloc[0]:g}",
        expected="prices above zero",
        remedy="Leave the cell empty when there was no price.",
        row=row_list(rows[ROW]),
        column=source.columns.get("close", "close"),
    )


def _read_benchmarks(source: Source, date_format: str) -> tuple[pd.DataFrame, list[Finding]]:
    columns = [
        Column("exchange", "text", filled=True, why="the exchange whose market it is"),
        Column("date", "date", filled=True),
        Column("close", "number", why="the index level, dividends included if prices are"),
    ]
    typed, findings = _typed(read_table(source), source, columns, date_format)
    bad = typed["close"] <= 0
    if bad.any():
        findings.append(_nonpositive(typed.loc[bad], source))
    once, more = _one_row_a_date(typed, source, ("exchange", "date"))
    return once, findings + more


def _read_factors(source: Source, date_format: str) -> tuple[pd.DataFrame, list[Finding]]:
    raw = read_table(source)
    named = [str(name) for name in raw.columns if name not in ("exchange", "date", ROW)]
    columns = [
        Column("exchange", "text", filled=True, why="the exchange whose factors they are"),
        Column("date", "date", filled=True),
        *(Column(name, "number") for name in named),
    ]
    typed, findings = _typed(raw, source, columns, date_format)
    for name in named:
        spread = float(typed[name].std())
        if spread > 0.2:
            findings.append(
                Finding(
                    "bad_value",
                    Severity.ERROR,
                    source.file,
                    got=f"a daily standard deviation of {spread:.2g}",
                    expected="daily returns as decimals: 0.01 for one percent",
                    remedy="Divide the column by 100.",
                    column=name,
                )
            )
    once, more = _one_row_a_date(typed, source, ("exchange", "date"))
    return once, findings + more


def _one_row_a_date(
    table: pd.DataFrame, source: Source, key: tuple[str, str]
) -> tuple[pd.DataFrame, list[Finding]]:
    """Equal repeats are merged; values that differ on one date are an error."""
    content = [name for name in table.columns if name != ROW]
    once = table[~table.duplicated(content)].reset_index(drop=True)
    conflict = once.duplicated(list(key), keep=False) & once["date"].notna()
    if not conflict.any():
        return once.drop(columns=ROW), []
    first = once[conflict].iloc[0]
    finding = Finding(
        "conflicting_price",
        Severity.ERROR,
        source.file,
        got=f"two rows for {first[key[0]]} on {first['date']:%Y-%m-%d}",
        expected=f"one row a {key[0]} and date",
        remedy="Keep the right one.",
        row=row_list(once.loc[conflict, ROW]),
        column=_theirs(source, key),
    )
    return once.drop(columns=ROW), [finding]
