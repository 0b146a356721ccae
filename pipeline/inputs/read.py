"""All tables of a study, typed and checked; errors of every file are shown together."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import TypeVar

import pandas as pd

from pipeline.core.findings import Finding, InputProblem, Severity, raise_errors
from pipeline.core.ledger import StageLedger
from pipeline.inputs.candidates import read_candidates
from pipeline.inputs.deals import read_deals
from pipeline.inputs.files import Source
from pipeline.inputs.market import read_benchmarks, read_factors, read_prices
from pipeline.inputs.wanted import Wanted

T = TypeVar("T")
FEWEST_MATCHED = 0.5


@dataclass(frozen=True, slots=True)
class Tables:
    """The table tables of a study.

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

    listed = attempt("deals", lambda file: read_deals(file, wanted, zone, date_format))
    candidates = attempt("candidates", lambda file: read_candidates(file, wanted, date_format))
    only = _securities(listed[0] if listed else None, candidates)
    if listed is not None:
        found += _across(listed[0], candidates, sources)
    prices = attempt("prices", lambda file: read_prices(file, only, date_format))
    benchmarks = attempt("benchmarks", lambda file: read_benchmarks(file, date_format))
    factors = attempt("factors", lambda file: read_factors(file, date_format))
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
