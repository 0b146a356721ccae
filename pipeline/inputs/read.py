"""All tables of a study, typed and checked; errors of every file are shown together."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import TypeVar

import pandas as pd

from pipeline.core.findings import Finding, InputProblem, Severity, raise_errors
from pipeline.core.ledger import StageLedger
from pipeline.inputs.candidates import read_candidates
from pipeline.inputs.deals import NO_RULES, read_deals
from pipeline.inputs.files import Only, Source
from pipeline.inputs.market import DECLARED, read_benchmarks, read_factors, read_prices
from pipeline.inputs.others import read_listings, read_news, restricted_findings
from pipeline.inputs.peers import listed_peers, read_peers
from pipeline.inputs.postgres import Fetcher, fetching
from pipeline.inputs.quoted import QuotedFiles
from pipeline.inputs.rates import read_delistings, read_rates
from pipeline.inputs.reach import EVERYTHING, Reach, touched
from pipeline.inputs.typed import finding
from pipeline.inputs.wanted import DealRules, Wanted

T = TypeVar("T")
FEWEST_MATCHED = 0.5


@dataclass(frozen=True, slots=True)
class Tables:
    """The table tables of a study.

    ``deals`` has one row a deal identifier; ``prices`` security, date, close, volume of the
    securities that deals or candidates name; ``benchmarks`` exchange, date, close; ``factors``
    exchange, date and one column a factor (None without a file); ``candidates``, ``peers``
    (security, peer, exchange), ``lines`` (the listings of companies that have several: security,
    line, exchange, primary, home, currency) and ``news`` (security, date, kind) likewise;
    ``rates`` date, currency, rate; ``delistings`` security, date, return, reason. A file declared
    to hold returns has ``return`` (simple, decimal) in place of close. ``spans`` (security, first,
    last) are the dates of which prices were read, None for all of them; ``digests`` the SHA-256 of
    each query's result.
    """

    deals: pd.DataFrame
    ledger: StageLedger
    prices: pd.DataFrame
    benchmarks: pd.DataFrame
    candidates: pd.DataFrame | None
    factors: pd.DataFrame | None
    findings: tuple[Finding, ...] = field(default=())
    peers: pd.DataFrame | None = None
    lines: pd.DataFrame | None = None
    news: pd.DataFrame | None = None
    rates: pd.DataFrame | None = None
    delistings: pd.DataFrame | None = None
    spans: pd.DataFrame | None = None
    digests: Mapping[str, str] = field(default_factory=dict)

    @property
    def listings(self) -> pd.DataFrame:
        """security, exchange: one row each, of deals, candidates and peers.

        A company with several listings stands there with each of them.
        """
        named = [table for table in (self.deals, self.candidates) if table is not None]
        own = pd.concat([table[["security", "exchange"]] for table in named]).drop_duplicates()
        own = own if self.lines is None else _each_line(own, self.lines)
        return own if self.peers is None else pd.concat([own, listed_peers(self.peers, own)])

    @property
    def factor_names(self) -> tuple[str, ...]:
        """The factor file's columns beyond exchange and date."""
        names = [] if self.factors is None else list(self.factors.columns)
        return tuple(str(name) for name in names if name not in ("exchange", "date"))


def _each_line(own: pd.DataFrame, lines: pd.DataFrame) -> pd.DataFrame:
    """security, exchange with the lines of a company in the place of the company."""
    known = own["security"].isin(lines["security"])
    used = lines[lines["security"].isin(own["security"])]
    stead = used[["line", "exchange"]].rename(columns={"line": "security"})
    return pd.concat([own[~known], stead]).drop_duplicates()


def read_inputs(
    sources: Mapping[str, Source],
    wanted: Wanted,
    *,
    zone: str = "",
    date_format: str = "",
    rules: DealRules = NO_RULES,
    declared: QuotedFiles = DECLARED,
    reach: Reach = EVERYTHING,
) -> Tables:
    """Read and check every table.

    Args:
        sources: table name -> file; deals, prices and benchmarks are required.
        wanted: the columns the study uses beyond the fixed ones.
        zone: time zone of announcements that name none.
        date_format: format of dates that are not ISO 8601.
        rules: what the study declares about the deal list.
        declared: what it declares of prices, benchmarks and factors.
        reach: how far around an event prices are needed.

    Raises:
        InputProblem: with the errors of all files at once.
    """
    with fetching() as fetcher:
        return _read_inputs(sources, wanted, zone, date_format, rules, declared, reach, fetcher)


def _read_inputs(
    sources: Mapping[str, Source],
    wanted: Wanted,
    zone: str,
    date_format: str,
    rules: DealRules,
    declared: QuotedFiles,
    reach: Reach,
    fetcher: Fetcher,
) -> Tables:
    found: list[Finding] = []

    def attempt(
        table: str, read: Callable[[Source], tuple[T, list[Finding]]], rows: Only | None = None
    ) -> T | None:
        """Collect the findings of one file instead of stopping there."""
        if table not in sources:
            return None
        try:
            value, findings = read(fetcher.at_hand(sources[table], rows))
        except InputProblem as fault:
            found.extend(fault.findings)
            return None
        found.extend(findings)
        return value

    listed = attempt(
        "deals", lambda file: read_deals(file, wanted, zone, file.dates(date_format), rules)
    )
    candidates = attempt(
        "candidates", lambda file: read_candidates(file, wanted, file.dates(date_format))
    )
    peers = attempt("peers", read_peers)
    lines = attempt("listings", read_listings)
    news = attempt("news", lambda file: read_news(file, file.dates(date_format)))
    only = touched(reach, listed[0] if listed else None, candidates, peers, lines)
    if listed is not None:
        found += _across(listed[0], candidates, sources, lines)
    if listed is not None and "restricted" in sources:
        found += _restricted(listed[0], sources, fetcher)
    prices = attempt(
        "prices", lambda file: read_prices(file, only, file.dates(date_format), declared), only
    )
    benchmarks = attempt(
        "benchmarks", lambda file: read_benchmarks(file, file.dates(date_format), declared)
    )
    factors = attempt("factors", lambda file: read_factors(file, file.dates(date_format), declared))
    rates = attempt("rates", lambda file: read_rates(file, file.dates(date_format), rules.common))
    delistings = attempt("delistings", lambda file: read_delistings(file, file.dates(date_format)))
    raise_errors(found)
    if listed is None or prices is None or benchmarks is None:
        raise KeyError("deals, prices and benchmarks must each have a source")
    return Tables(
        *listed,
        prices=prices,
        benchmarks=benchmarks,
        candidates=candidates,
        factors=factors,
        findings=tuple(found),
        peers=peers,
        lines=lines,
        news=news,
        rates=rates,
        delistings=delistings,
        spans=only.spans if only else None,
        digests=fetcher.digests,
    )


def _restricted(
    deals: pd.DataFrame, sources: Mapping[str, Source], fetcher: Fetcher
) -> list[Finding]:
    """What the restricted list says of the deals, or why it cannot be read."""
    try:
        listed = fetcher.at_hand(sources["restricted"])
        return restricted_findings(deals, sources["deals"], listed)
    except InputProblem as fault:
        return list(fault.findings)


def _across(
    deals: pd.DataFrame,
    candidates: pd.DataFrame | None,
    sources: Mapping[str, Source],
    lines: pd.DataFrame | None,
) -> list[Finding]:
    """What deals and candidates say together: one exchange a security, candidates that match."""
    tables = [deals] if candidates is None else [deals, candidates]
    pairs = pd.concat([table[["security", "exchange"]] for table in tables]).drop_duplicates()
    pairs = pairs[(pairs["security"] != "") & (pairs["exchange"] != "")]
    if lines is not None:
        pairs = pairs[~pairs["security"].isin(lines["security"])]
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
                remedy="Correct the exchange, or name the company's listings in inputs.listings.",
                column="exchange",
            )
        )
    if candidates is None:
        return findings
    findings += _known_too_late(deals, candidates, sources["candidates"])
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


def _known_too_late(deals: pd.DataFrame, candidates: pd.DataFrame, source: Source) -> list[Finding]:
    """An error for candidates whose values date from after the deal they are meant to explain."""
    announced = deals.set_index("deal_id")["announced_date"]
    announced = announced[~announced.index.duplicated()]
    late = candidates["as_of"] > candidates["deal_id"].map(announced)
    if not late.any():
        return []
    words = (
        f"values of {int(late.sum())} companies that date from after their deal",
        "values known when the deal was announced",
        "Take the values of the last report before the announcement.",
    )
    return [finding("known_too_late", candidates[late], source, ("as_of",), words)]
