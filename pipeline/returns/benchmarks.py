"""Whether a benchmark can serve: not the share itself, of the right market, dated as the share."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd

from pipeline.core.findings import Finding, Severity
from pipeline.core.ledger import Action, LedgerEntry, StageLedger
from pipeline.core.prices import RISK_FREE, Floats, Integers, PricePanel, blocks

FEWEST_DAYS = 60
MOST = 0.5
STILL = 1e-12


@dataclass(frozen=True, slots=True)
class BenchmarkLimits:
    """Thresholds of the checks; all common practice, no source.

    Attributes:
        largest_weight: a company's share of the benchmark's market value.
        dominating: correlation from which on a company is suspected to be its benchmark.
        identical: correlation from which on it is.
        lowest: correlation below which a benchmark says nothing of a share.
        highest_rate: mean risk-free return a session.
    """

    largest_weight: float = 0.10
    dominating: float = 0.95
    identical: float = 0.999
    lowest: float = 0.05
    highest_rate: float = 0.002


@dataclass(frozen=True, slots=True, eq=False)
class BenchmarkFit:
    """How the S companies with deals of one exchange move with their benchmark.

    ``columns`` (S,) are theirs in the panel, in order; ``lags`` (3, S) the correlations with the
    benchmark of the session before, of the same and of the session after; ``noise`` (S,) what a
    correlation of nothing scatters by.
    """

    exchange: str
    columns: Integers
    securities: tuple[str, ...]
    lags: Floats
    noise: Floats

    @property
    def same(self) -> Floats:
        """(S,) correlation on the same session."""
        return np.asarray(self.lags[1])

    def of(self, column: int) -> float:
        """The correlation of the company in that column."""
        return float(self.same[np.searchsorted(self.columns, column)])

    def wins(self, lag: int, lowest: float) -> Integers:
        """Companies that move with another session's benchmark clearly more than with their own."""
        other = self.lags[lag]
        clear = (other > lowest) & (other > 2 * self.noise)
        return np.flatnonzero(clear & (other > self.same + 2 * np.sqrt(2) * self.noise))


def benchmark_fits(
    panels: Mapping[str, PricePanel], located: pd.DataFrame
) -> dict[str, BenchmarkFit]:
    """Exchange -> how its companies with deals move with its benchmark."""
    return {
        str(exchange): _fit(panels[str(exchange)], np.unique(own["column"].to_numpy()))
        for exchange, own in located.groupby("exchange", sort=True)
    }


def benchmark_findings(
    panels: Mapping[str, PricePanel], fits: Mapping[str, BenchmarkFit], limits: BenchmarkLimits
) -> list[Finding]:
    """Errors and warnings about each exchange's benchmark and risk-free rate."""
    found: list[Finding] = []
    for exchange, fit in fits.items():
        panel = panels[exchange]
        found += _rate(panel, limits)
        known = panel.benchmark[np.isfinite(panel.benchmark)]
        if known.size and np.ptp(known) <= STILL:
            found.append(_constant(exchange))
            continue
        found += _identical(fit, limits)
        found += list(_shifted(fit, limits)) or list(_unrelated(fit, limits))
    return found


def dominated(
    located: pd.DataFrame,
    fits: Mapping[str, BenchmarkFit],
    benchmarks: pd.DataFrame,
    limits: BenchmarkLimits,
) -> tuple[list[Finding], StageLedger]:
    """Deals whose company is suspected to be much of its own benchmark, flagged and kept.

    A company of weight w in its benchmark explains its own news away: its abnormal return is
    biased toward zero by about w. The weight is the deal's market value over the benchmark's on
    the last date before day zero, where both are known; else the correlation is the symptom.

    Args:
        located: deal_id, security, exchange, column, day_zero, market_value.
        fits: exchange -> fit, of these companies at least.
        benchmarks: exchange, date, and market_value where the file has it.
    """
    weight = _weights(located, benchmarks)
    pairs = zip(located["exchange"], located["column"], strict=True)
    same = np.array([fits[str(exchange)].of(column) for exchange, column in pairs])
    heavy = weight > limits.largest_weight
    alike = np.isnan(weight) & (same > limits.dominating)
    deals = located["deal_id"].astype(str).tolist()
    entries = [
        _flag(deals[row], f"{weight[row]:.0%} of the benchmark", f"{limits.largest_weight:.0%}")
        for row in np.flatnonzero(heavy)
    ]
    entries += [
        _flag(deals[row], f"correlation {same[row]:.3f}", f"{limits.dominating:.2f}")
        for row in np.flatnonzero(alike)
    ]
    companies = sorted(set(located["security"].astype(str)[heavy | alike]))
    findings = [_dominated(companies, entries)] if entries else []
    return findings, StageLedger("benchmark", len(located), tuple(entries))


def _flag(deal: str, value: str, threshold: str) -> LedgerEntry:
    return LedgerEntry(deal, "benchmark_dominated", Action.FLAGGED, value, threshold)


def _weights(located: pd.DataFrame, benchmarks: pd.DataFrame) -> Floats:
    """(N,) each deal's market value over its benchmark's; NaN where one is not known."""
    weight = np.full(len(located), np.nan)
    if "market_value" not in benchmarks or "market_value" not in located:
        return weight
    exchanges = located["exchange"].to_numpy()
    day = located["day_zero"].to_numpy().astype("datetime64[D]")
    value = located["market_value"].to_numpy(np.float64)
    for exchange, rows in benchmarks.dropna(subset="market_value").groupby("exchange"):
        rows = rows.sort_values("date")
        here = np.flatnonzero(exchanges == exchange)
        dates = rows["date"].to_numpy().astype("datetime64[D]")
        before = np.searchsorted(dates, day[here]) - 1
        total = rows["market_value"].to_numpy(np.float64)[np.maximum(before, 0)]
        usable = (before >= 0) & (total > 0)
        weight[here] = np.where(usable, value[here] / np.where(usable, total, 1.0), np.nan)
    return weight


def _fit(panel: PricePanel, columns: Integers) -> BenchmarkFit:
    market = panel.benchmark[:, None]
    parts, counts = [], []
    for block in blocks(len(columns)):
        returns = panel.returns[:, columns[block]]
        pairs = ((returns[1:], market[:-1]), (returns, market), (returns[:-1], market[1:]))
        parts.append(np.stack([_correlation(own, other) for own, other in pairs]))
        counts.append((np.isfinite(returns) & np.isfinite(market)).sum(axis=0))
    lags, days = np.concatenate(parts, axis=1), np.concatenate(counts)
    return BenchmarkFit(
        panel.exchange,
        columns,
        tuple(panel.securities[at] for at in columns),
        lags,
        1 / np.sqrt(np.maximum(days, 1)),
    )


def _correlation(own: Floats, other: Floats) -> Floats:
    """(S,) correlation of (T, S) with (T, 1) over the days both have; NaN below sixty."""
    known = np.isfinite(own) & np.isfinite(other)
    days = known.sum(axis=0)
    x, y = np.where(known, own, 0.0), np.where(known, other, 0.0)
    with np.errstate(divide="ignore", invalid="ignore"):
        x = np.where(known, x - x.sum(axis=0) / days, 0.0)
        y = np.where(known, y - y.sum(axis=0) / days, 0.0)
        found = (x * y).sum(axis=0) / np.sqrt((x**2).sum(axis=0) * (y**2).sum(axis=0))
    return np.asarray(np.where(days >= FEWEST_DAYS, found, np.nan))


def _rate(panel: PricePanel, limits: BenchmarkLimits) -> Iterator[Finding]:
    rates = panel.factors.get(RISK_FREE)
    known = rates[np.isfinite(rates)] if rates is not None else np.empty(0)
    if known.size and abs(known.mean()) > limits.highest_rate:
        yield Finding(
            "risk_free_not_daily",
            Severity.ERROR,
            "factors",
            got=f"{panel.exchange}: a mean of {known.mean():.4f} a session, "
            f"{(1 + known.mean()) ** 250 - 1:.0%} a year",
            expected=f"a daily rate as a decimal, at most {limits.highest_rate:g} on average",
            remedy="Divide an annual rate by the sessions of a year, a percentage by 100.",
            column=RISK_FREE,
        )


def _constant(exchange: str) -> Finding:
    return Finding(
        "benchmark_constant",
        Severity.ERROR,
        "benchmarks",
        got=f"{exchange}: the same return on every session",
        expected="an index that moves",
        remedy="Give the index level of each session.",
        column="close",
    )


def _identical(fit: BenchmarkFit, limits: BenchmarkLimits) -> Iterator[Finding]:
    same = np.flatnonzero(fit.same > limits.identical)
    if same.size:
        named = ", ".join(fit.securities[at] for at in same[:4])
        yield Finding(
            "benchmark_is_the_share",
            Severity.ERROR,
            "benchmarks",
            got=f"{fit.exchange}: correlation {fit.same[same].max():.5f} with {named}",
            expected=f"an index other than the share, correlation below {limits.identical:g}",
            remedy="Take an index of the market, not the company's own price.",
            column="close",
        )


def _shifted(fit: BenchmarkFit, limits: BenchmarkLimits) -> Iterator[Finding]:
    """Dates off by one: another session's benchmark fits most companies better than their own.

    An error where their own session's benchmark says nothing of any company, allowing for noise.
    """
    tested = np.isfinite(fit.same)
    for lag, words in ((0, "before"), (2, "after")):
        winners = fit.wins(lag, limits.lowest)
        if len(winners) <= MOST * tested.sum():
            continue
        least = np.maximum(limits.lowest, 3 * fit.noise)
        nothing = bool((fit.same < least)[tested].all())
        yield Finding(
            "benchmark_shifted",
            Severity.ERROR if nothing else Severity.WARNING,
            "benchmarks",
            got=f"{fit.exchange}: {len(winners)} of {tested.sum()} companies move more with the "
            f"benchmark of the session {words} (median correlation "
            f"{np.nanmedian(fit.lags[lag]):.2f}) than with that of their own session "
            f"({np.nanmedian(fit.same):.2f})",
            expected="dates of benchmark and prices that mean the same session",
            remedy="Check the time zone the dates were cut in, and whether one file carries the "
            "date of delivery.",
            column="date",
        )


def _unrelated(fit: BenchmarkFit, limits: BenchmarkLimits) -> Iterator[Finding]:
    tested = np.isfinite(fit.same)
    low = tested & (fit.same < limits.lowest)
    if low.sum() > MOST * tested.sum():
        yield Finding(
            "benchmark_unrelated",
            Severity.WARNING,
            "benchmarks",
            got=f"{fit.exchange}: a correlation below {limits.lowest:g} with {low.sum()} of "
            f"{tested.sum()} companies",
            expected="the index of the market the companies are listed in",
            remedy="Check the exchange code and the region of the index.",
            column="exchange",
        )


def _dominated(companies: list[str], entries: list[LedgerEntry]) -> Finding:
    named = ", ".join(companies[:4])
    more = f" and {len(companies) - 4} more" if len(companies) > 4 else ""
    return Finding(
        "benchmark_dominated",
        Severity.WARNING,
        "benchmarks",
        got=f"{len(entries)} deals of {named}{more}, as {entries[0].value}",
        expected="companies that are a small part of their benchmark",
        remedy="Take a broader index, or one without the company; the deals are kept and flagged, "
        "and the sensitivity table leaves them out.",
        column="close",
    )
